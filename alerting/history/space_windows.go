package history

import (
	"fmt"

	"golang.org/x/sys/windows"
)

// DiskSpace tells how much is free on the file system of a directory.
func DiskSpace(dir string) (Space, error) {
	name, err := windows.UTF16PtrFromString(dir)
	if err != nil {
		return Space{}, fmt.Errorf("ask for the free space of %s: %w", dir, err)
	}
	var s Space
	if err := windows.GetDiskFreeSpaceEx(name, &s.Free, &s.Total, nil); err != nil {
		return Space{}, fmt.Errorf("ask for the free space of %s: %w", dir, err)
	}
	return s, nil
}
