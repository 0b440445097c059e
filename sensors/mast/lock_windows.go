package mast

import (
	"os"

	"golang.org/x/sys/windows"
)

// lockFile takes the lock of an open file, or says at once that it is taken.
func lockFile(file *os.File) error {
	const how = windows.LOCKFILE_EXCLUSIVE_LOCK | windows.LOCKFILE_FAIL_IMMEDIATELY
	return windows.LockFileEx(windows.Handle(file.Fd()), how, 0, 1, 0, &windows.Overlapped{})
}
