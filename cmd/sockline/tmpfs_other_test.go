//go:build !linux

package main

import (
	"testing"
)

// tmpfs would be a small file system that can be filled.
func tmpfs(t *testing.T) string {
	t.Helper()
	t.Skip("SKIPPED, NOT TESTED: a small file system is mounted on Linux only")
	return ""
}
