//go:build linux || darwin

package history

import (
	"fmt"

	"golang.org/x/sys/unix"
)

// DiskSpace tells how much is free on the file system of a directory.
func DiskSpace(dir string) (Space, error) {
	var st unix.Statfs_t
	if err := unix.Statfs(dir, &st); err != nil {
		return Space{}, fmt.Errorf("ask for the free space of %s: %w", dir, err)
	}
	size := uint64(st.Bsize)
	free := uint64(st.Bavail) * size // without what is kept for root
	return Space{Free: free, Total: (uint64(st.Blocks)-uint64(st.Bfree))*size + free}, nil
}
