package mast

import (
	"fmt"
	"os"
	"testing"

	"golang.org/x/sys/unix"
)

// terminal is a pseudo-terminal: what is written to one side comes out of a
// device that is a serial line to whoever opens it.
func terminal(t *testing.T) (master *os.File, device string) {
	t.Helper()
	master, err := os.OpenFile("/dev/ptmx", os.O_RDWR|unix.O_NOCTTY, 0)
	if err != nil {
		t.Skipf("SKIPPED, NOT TESTED: there are no pseudo-terminals: %v", err)
	}
	t.Cleanup(func() { master.Close() })
	if err := unix.IoctlSetPointerInt(int(master.Fd()), unix.TIOCSPTLCK, 0); err != nil {
		t.Skipf("SKIPPED, NOT TESTED: unlock the pseudo-terminal: %v", err)
	}
	n, err := unix.IoctlGetInt(int(master.Fd()), unix.TIOCGPTN)
	if err != nil {
		t.Fatal(err)
	}
	return master, fmt.Sprintf("/dev/pts/%d", n)
}
