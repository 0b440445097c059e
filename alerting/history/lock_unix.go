//go:build unix

package history

import (
	"errors"
	"os"
	"syscall"
)

// lockFile takes the lock of an open file, or a share in it, without waiting.
// It is false where somebody else holds the lock. The lock ends with the file.
func lockFile(file *os.File, shared bool) (taken bool, err error) {
	how := syscall.LOCK_EX
	if shared {
		how = syscall.LOCK_SH
	}
	err = syscall.Flock(int(file.Fd()), how|syscall.LOCK_NB)
	if errors.Is(err, syscall.EWOULDBLOCK) {
		return false, nil
	}
	return err == nil, err
}
