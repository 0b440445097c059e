package history

import (
	"errors"
	"os"

	"golang.org/x/sys/windows"
)

// lockedByte is a place far beyond the end of any file, and beside the one
// that the library of the file locks for itself: here, unlike elsewhere, one
// handle cannot lock the same bytes twice.
const lockedByte = 1 << 30

// lockFile takes the lock of an open file, or a share in it, without waiting.
// It is false where somebody else holds the lock. The lock ends with the file.
func lockFile(file *os.File, shared bool) (taken bool, err error) {
	how := uint32(windows.LOCKFILE_FAIL_IMMEDIATELY)
	if !shared {
		how |= windows.LOCKFILE_EXCLUSIVE_LOCK
	}
	err = windows.LockFileEx(windows.Handle(file.Fd()), how, 0, 1, 0, &windows.Overlapped{OffsetHigh: lockedByte})
	if errors.Is(err, windows.ERROR_LOCK_VIOLATION) || errors.Is(err, windows.ERROR_IO_PENDING) {
		return false, nil
	}
	return err == nil, err
}
