//go:build !linux && !darwin && !windows

package history

import "fmt"

// DiskSpace would tell how much is free on the file system of a directory.
func DiskSpace(dir string) (Space, error) {
	return Space{}, fmt.Errorf("the free space of %s cannot be asked for on this system", dir)
}
