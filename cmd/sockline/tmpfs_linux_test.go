package main

import (
	"syscall"
	"testing"
)

// tmpfs is a directory on a file system of its own that holds 4 MiB.
func tmpfs(t *testing.T) string {
	t.Helper()
	dir := t.TempDir()
	if err := syscall.Mount("tmpfs", dir, "tmpfs", 0, "size=4m"); err != nil {
		t.Skipf("SKIPPED, NOT TESTED: no right to mount a tmpfs: %v", err)
	}
	t.Cleanup(func() {
		if err := syscall.Unmount(dir, 0); err != nil {
			t.Errorf("unmount: %v", err)
		}
	})
	return dir
}
