//go:build unix

package main

import (
	"os"
	"os/exec"
	"strings"
	"syscall"
	"testing"
	"time"

	"sockline/alerting"
)

// TestDemoOutlivesAPause stops the demo's process for longer than its
// connections bear, and lets it go on: it runs late, and tells the whole story.
func TestDemoOutlivesAPause(t *testing.T) {
	if racing {
		t.Skip(checkedApart)
	}
	pause := 6 * time.Second
	if os.Getenv("SOCKLINE_LONG") != "" {
		pause = 12 * time.Second
	}
	self, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	var stdout, stderr console
	c := exec.Command(self)
	c.Env = append(os.Environ(), childCommand+"=demo --speed 60", "TMPDIR="+t.TempDir())
	c.Stdout, c.Stderr = &stdout, &stderr
	if err := c.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = c.Process.Kill() })
	ended := make(chan error, 1)
	go func() { ended <- c.Wait() }()
	until(t, "the story to be under way", func() bool { return strings.Contains(stdout.String(), "\n14:0") })
	for _, s := range []struct {
		signal syscall.Signal
		after  time.Duration
	}{{syscall.SIGSTOP, pause}, {syscall.SIGCONT, 2 * time.Minute}} {
		if err := c.Process.Signal(s.signal); err != nil {
			t.Fatal(err)
		}
		late := time.NewTimer(s.after)
		defer late.Stop()
		select {
		case err := <-ended:
			if err != nil {
				t.Fatalf("it ends with %v: %s", err, stderr.String())
			}
		case <-late.C:
		}
	}
	if story := stdout.String(); !strings.HasSuffix(strings.Join(strings.Fields(story), " "), alerting.Notice) {
		t.Errorf("the story has no end: %s\n%s", story, stderr.String())
	} else {
		checkStory(t, story)
	}
}
