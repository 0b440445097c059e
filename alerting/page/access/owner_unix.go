//go:build unix

package access

import (
	"fmt"
	"os"
	"path/filepath"
	"syscall"
)

// sameOwner gives a new file the owner of the one that it takes the place of,
// or else of its directory: what root writes, the daemon must be able to read.
// Only root can, and needs to.
func sameOwner(f *os.File, path string) error {
	if os.Geteuid() != 0 {
		return nil
	}
	info, err := os.Stat(path)
	if err != nil {
		if info, err = os.Stat(filepath.Dir(path)); err != nil {
			return fmt.Errorf("look whose directory it is: %w", err)
		}
	}
	if s, ok := info.Sys().(*syscall.Stat_t); ok {
		return f.Chown(int(s.Uid), int(s.Gid))
	}
	return nil
}
