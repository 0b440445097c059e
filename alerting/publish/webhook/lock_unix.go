//go:build unix

package webhook

import (
	"os"

	"golang.org/x/sys/unix"
)

// lock keeps a second program out of a file; it ends with the file.
func lock(f *os.File) error { return unix.Flock(int(f.Fd()), unix.LOCK_EX|unix.LOCK_NB) }
