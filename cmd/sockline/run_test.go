package main

import (
	"bytes"
	"context"
	"net"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/alerting/history"
	"sockline/alerting/wording"
	"sockline/sensors"
)

// console collects what a program that runs beside the test writes.
type console struct {
	mu sync.Mutex
	b  bytes.Buffer
}

func (c *console) Write(p []byte) (int, error) {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.b.Write(p)
}

func (c *console) String() string {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.b.String()
}

// TestRunCommand runs the daemon as the command line does: it says where its
// page is, answers SIGHUP, and ends with its context.
func TestRunCommand(t *testing.T) {
	cfg := site(t, "embedded://127.0.0.1:0", filepath.Join(t.TempDir(), "history"))
	capture := captureName(t)
	ctx, cancel := context.WithCancel(t.Context())
	var stdout, stderr console
	p := program{stdin: strings.NewReader(""), stdout: &stdout, stderr: &stderr, now: time.Now}
	code := make(chan int, 1)
	go func() { code <- p.run(ctx, []string{"run", "--config", cfg, "--capture", capture}) }()
	until(t, "the daemon to be connected", func() bool { return strings.Contains(stderr.String(), `"topics":8`) })
	self, err := os.FindProcess(os.Getpid())
	if err != nil {
		t.Fatal(err)
	}
	if err := self.Signal(syscall.SIGHUP); err != nil {
		t.Fatal(err)
	}
	until(t, "an answer to SIGHUP", func() bool { return strings.Contains(stderr.String(), "SIGHUP: the configuration has not changed") })
	cancel()
	if got := <-code; got != exitDone || stdout.String() != "" {
		t.Errorf("exit %d, standard output %q\n%s", got, stdout.String(), stderr.String())
	}
	for _, want := range []string{"nobody is told when this program stops", "http://127.0.0.1:", "sockline has stopped"} {
		if !strings.Contains(stderr.String(), want) {
			t.Errorf("the log lacks %q", want)
		}
	}
	if _, end := readCapture(t, capture); end == 0 {
		t.Error("the capture has no end mark")
	}
	// The same capture again: it is evidence, and not overwritten.
	if o := call(t, "run", "--config", cfg, "--capture", capture); o.code != exitFailed || !strings.Contains(o.stderr, "choose another name") {
		t.Errorf("a capture that exists: exit %d, %s", o.code, o.stderr)
	}
	for _, args := range [][]string{{"run"}, {"run", "--config", writeFile(t, "bad.toml", "[airfield]\nid = 3\n")}} {
		if o := call(t, args...); o.code != exitUsage {
			t.Errorf("%v: exit %d, %s", args, o.code, o.stderr)
		}
	}
}

// manager is the socket of a service manager.
type manager struct {
	*net.UnixConn
	heard console
}

func listenAsManager(tb testing.TB, watchdog string) (*manager, *notifier) {
	tb.Helper()
	path := filepath.Join(tb.TempDir(), "notify")
	conn, err := net.ListenUnixgram("unixgram", &net.UnixAddr{Name: path, Net: "unixgram"})
	if err != nil {
		tb.Fatal(err)
	}
	m := &manager{UnixConn: conn}
	done := make(chan struct{})
	go func() {
		defer close(done)
		b := make([]byte, 4096)
		for {
			n, err := conn.Read(b)
			if err != nil {
				return
			}
			_, _ = m.heard.Write(append(b[:n], '\n'))
		}
	}()
	tb.Cleanup(func() { conn.Close(); <-done })
	env := map[string]string{"NOTIFY_SOCKET": path, "WATCHDOG_USEC": watchdog}
	n, err := newNotifier(func(k string) string { return env[k] })
	if err != nil {
		tb.Fatal(err)
	}
	tb.Cleanup(n.close)
	return m, n
}

func (m *manager) count(line string) int { return strings.Count(m.heard.String(), line+"\n") }

// TestServiceManager: ready with the first subscription, the watchdog fed
// while steps close and not while the evaluation hangs, a word at the end.
func TestServiceManager(t *testing.T) {
	m, n := listenAsManager(t, "2000000")
	cfg := mustLoad(t, site(t, "embedded://127.0.0.1:0", filepath.Join(t.TempDir(), "history")))
	hang := make(chan struct{})
	var hanging sync.Mutex // held by the test while the evaluation is to hang
	d, err := newDaemon(cfg, daemonOptions{
		exercise: true, clock: newHurry(20).clock(t), notify: n, instance: "under-test", listen: time.Millisecond, log: zerolog.Nop(),
		watch: func(*report) { hanging.Lock(); defer hanging.Unlock() },
	})
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	ended := make(chan error, 1)
	go func() { ended <- d.Run(ctx) }()
	until(t, "READY", func() bool { return m.count("READY=1") == 1 })
	until(t, "the watchdog to be fed twice", func() bool { return m.count("WATCHDOG=1") >= 2 })
	hanging.Lock()
	steps := d.loop.steps.Load()
	time.AfterFunc(4*time.Second, func() { close(hang) }) // twice what the watchdog allows
	// One more meal may be on its way for what was done before.
	until(t, "the evaluation to hang for 4 s", func() bool {
		select {
		case <-hang:
			return true
		default:
			return false
		}
	})
	fed := m.count("WATCHDOG=1")
	if now := d.loop.steps.Load(); now > steps+1 {
		t.Errorf("%d steps closed while the evaluation was to hang", now-steps)
	}
	if fed > 5 {
		t.Errorf("the watchdog was fed %d times, of which at most 5 before the hang", fed)
	}
	hanging.Unlock()
	until(t, "the watchdog to be fed again", func() bool { return m.count("WATCHDOG=1") > fed })
	cancel()
	if err := <-ended; err != nil {
		t.Error(err)
	}
	until(t, "STOPPING", func() bool { return m.count("STOPPING=1") == 1 })
}

// BenchmarkStart measures how long a start takes to read back two hours of
// eight masts and to work through them.
func BenchmarkStart(b *testing.B) {
	cfg := mustLoad(b, skerrymoor)
	scene := sceneAt(b, cfg, steady, sensors.At(time.Date(2026, 7, 1, 14, 0, 0, 0, time.UTC)))
	scene.Length = 2*time.Hour + time.Minute
	specs, err := stationSpecs(cfg, scene.Start.Time())
	if err != nil {
		b.Fatal(err)
	}
	dir := b.TempDir()
	now, _ := exerciseInto(b, cfg, dir, scene.Start, func(l *loop) error {
		return scene.Generate(specs, func(m sensors.Message) error { l.take(m); return nil })
	})
	for b.Loop() {
		a := newArchive(dir, history.Options{}, func(wording.Notice) {})
		if err := a.open(); err != nil {
			b.Fatal(err)
		}
		store, err := a.reading()
		if err != nil {
			b.Fatal(err)
		}
		if err := mustLoop(b, cfg, true).restore(store, now); err != nil {
			b.Fatal(err)
		}
		if err := a.close(b.Context()); err != nil {
			b.Fatal(err)
		}
	}
}
