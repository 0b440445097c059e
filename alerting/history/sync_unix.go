//go:build unix

package history

import (
	"errors"
	"fmt"
	"os"
)

// syncDir makes the names in a directory durable.
func syncDir(dir string) error { return syncPath(dir) }

// syncPath makes a file durable that is not open, or the names in a directory.
func syncPath(path string) error {
	f, err := os.Open(path)
	if err != nil {
		return fmt.Errorf("sync %s: %w", path, err)
	}
	err = f.Sync()
	if err = errors.Join(err, f.Close()); err != nil {
		return fmt.Errorf("sync %s: %w", path, err)
	}
	return nil
}
