//go:build !linux

package mast

import (
	"os"
	"testing"
)

// terminal would be a pseudo-terminal; how to get one differs from system to
// system.
func terminal(t *testing.T) (master *os.File, device string) {
	t.Helper()
	t.Skip("SKIPPED, NOT TESTED: pseudo-terminals are made on Linux only")
	return nil, ""
}
