//go:build unix

package mast

import (
	"os"
	"syscall"
)

// lockFile takes the lock of an open file, or says at once that it is taken.
func lockFile(file *os.File) error {
	return syscall.Flock(int(file.Fd()), syscall.LOCK_EX|syscall.LOCK_NB)
}
