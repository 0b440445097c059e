package history

import (
	"errors"
	"fmt"
	"os"
)

// syncDir does nothing: a directory cannot be flushed here, the file system
// keeps its names by a journal of its own.
func syncDir(string) error { return nil }

// syncPath makes a file durable that is not open. Only a file that may be
// written can be flushed here.
func syncPath(path string) error {
	f, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		return fmt.Errorf("sync %s: %w", path, err)
	}
	err = f.Sync()
	if err = errors.Join(err, f.Close()); err != nil {
		return fmt.Errorf("sync %s: %w", path, err)
	}
	return nil
}
