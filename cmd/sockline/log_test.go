package main

import (
	"bufio"
	"fmt"
	"io"
	"net"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/sensors/feed/brokertest"
)

// TestLogThatNobodyReads: whoever logs never waits, what has room waits in
// order, and what had none is counted and told.
func TestLogThatNobodyReads(t *testing.T) {
	const all = 3 * mostLogLines
	reader, out := io.Pipe()
	q := newLogQueue(out)
	log := zerolog.New(q)
	log.Info().Int("n", 0).Send()
	until(t, "the first line to be under way", func() bool { return len(q.lines) == 0 })
	begun := time.Now()
	for i := 1; i < all; i++ {
		log.Info().Int("n", i).Send()
	}
	if took := time.Since(begun); took > patience {
		t.Errorf("logging took %v", took)
	}
	if q.dropped.Load() != all-1-mostLogLines || len(q.lines) != mostLogLines {
		t.Fatalf("%d lines wait, %d are dropped", len(q.lines), q.dropped.Load())
	}
	if q.flush(10 * time.Millisecond) {
		t.Error("all is said to be written, and nobody has read")
	}
	text := bufio.NewReader(reader)
	for i := range all - int(q.dropped.Load()) {
		line, err := text.ReadString('\n')
		if want := fmt.Sprintf(`{"level":"info","n":%d}`+"\n", i); err != nil || line != want {
			t.Fatalf("line %d is %q, %v", i, line, err)
		}
	}
	line, err := text.ReadString('\n')
	if want := fmt.Sprintf(`"lines":%d`, q.dropped.Load()); err != nil || !strings.Contains(line, want) || !strings.Contains(line, "lines of the log were dropped") {
		t.Errorf("of what was dropped it says %q, %v", line, err)
	}
	<-q.done
}

// TestLogOfLongLines: long lines find no more room than short ones.
func TestLogOfLongLines(t *testing.T) {
	reader, out := io.Pipe()
	q := newLogQueue(out)
	long := []byte(strings.Repeat("x", mostLogBytes/8))
	for range 20 {
		if n, err := q.Write(long); n != len(long) || err != nil {
			t.Fatal(n, err)
		}
	}
	if q.dropped.Load() < 11 || q.bytes.Load() > mostLogBytes {
		t.Errorf("%d bytes wait, %d lines are dropped", q.bytes.Load(), q.dropped.Load())
	}
	go func() { _, _ = io.Copy(io.Discard, reader) }()
	if !q.flush(patience) || q.bytes.Load() != 0 {
		t.Errorf("%d bytes are left", q.bytes.Load())
	}
}

// clogged starts the program with a standard error that is full from the start,
// and whose reader reads nothing.
func clogged(t *testing.T, broker string) (c *exec.Cmd, reader *os.File, address string) {
	t.Helper()
	reader, full, err := os.Pipe()
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = reader.Close() })
	if err := full.SetWriteDeadline(time.Now().Add(200 * time.Millisecond)); err != nil {
		t.Fatal(err)
	}
	for err == nil {
		_, err = full.Write([]byte("filler\n"))
	}
	free, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	address = free.Addr().String()
	if err := free.Close(); err != nil {
		t.Fatal(err)
	}
	path := site(t, broker, filepath.Join(t.TempDir(), "history"))
	amend(t, path, "127.0.0.1:0", address)
	self, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	c = exec.Command(self)
	c.Env = append(os.Environ(), childCommand+"=run --exercise --config "+path)
	c.Stderr = full
	if err := c.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = c.Process.Kill() })
	if err := full.Close(); err != nil { // the child has its own
		t.Fatal(err)
	}
	return c, reader, address
}

// ask gives what the page of a program answers, "" for nothing.
func ask(address, what string) string {
	r, err := (&http.Client{Timeout: time.Second}).Get("http://" + address + what)
	if err != nil {
		return ""
	}
	defer r.Body.Close()
	text, err := io.ReadAll(r.Body)
	if err != nil || r.StatusCode != http.StatusOK {
		return ""
	}
	return string(text)
}

// ends tells the program to stop, and waits until it has.
func ends(t *testing.T, c *exec.Cmd) {
	t.Helper()
	if err := c.Process.Signal(syscall.SIGTERM); err != nil {
		t.Fatal(err)
	}
	ended := make(chan error, 1)
	go func() { ended <- c.Wait() }()
	late := time.NewTimer(patience)
	defer late.Stop()
	select {
	case err := <-ended:
		if err != nil {
			t.Errorf("it ends with %v", err)
		}
	case <-late.C:
		t.Error("it does not end")
	}
}

// TestClogged: a daemon whose log nobody reads tells alerts over MQTT and HTTP
// as ever, says what it logged when the reader is back, goes on when the reader
// goes away for good, and ends when it is told to.
func TestClogged(t *testing.T) {
	broker := brokertest.Start(t)
	heard := listenTo(t, broker.URL())
	c, reader, address := clogged(t, broker.URL())
	now := time.Now()
	h := hurry{begun: now, base: now, factor: 1} // the clock that the program reads
	blow(t, mustLoad(t, site(t, broker.URL(), t.TempDir())), strings.Replace(steady, "starts 14 s grows 40 s", "starts 1 s grows 4 s", 1), broker.URL(), h)

	heard.awaitAlert(t, "an alert over MQTT", 0, func(a alertLine) bool { return landingLoss(a) && a.Recorded })
	until(t, "the alert over HTTP", func() bool { return strings.Contains(ask(address, "/api/v1/now"), `"headwind-loss"`) })
	metrics := ask(address, "/metrics")
	if !strings.Contains(metrics, "\nsockline_log_dropped_lines_total 0\n") || strings.Contains(metrics, "\nsockline_log_waiting_lines 0\n") {
		t.Error("no line waits: the pipe was not full, and the test shows nothing")
	}

	lines := bufio.NewScanner(reader)
	for lines.Scan() && !strings.Contains(lines.Text(), "sockline starts") {
	}
	if lines.Err() != nil || !strings.Contains(lines.Text(), "sockline starts") {
		t.Fatalf("the log holds %q, %v", lines.Text(), lines.Err())
	}
	until(t, "the log to be read", func() bool {
		lines.Scan()
		return strings.Contains(ask(address, "/metrics"), "\nsockline_log_waiting_lines 0\n")
	})
	if err := reader.Close(); err != nil {
		t.Fatal(err)
	}
	// A reload writes into the pipe that nobody has any more.
	if err := c.Process.Signal(syscall.SIGHUP); err != nil {
		t.Fatal(err)
	}
	n := heard.count()
	heard.awaitAlert(t, "an alert without a log", n, landingLoss)
	ends(t, c)
}

// TestCloggedEnd: the end of a daemon does not wait for the reader of its log.
func TestCloggedEnd(t *testing.T) {
	broker := brokertest.Start(t)
	c, _, address := clogged(t, broker.URL())
	until(t, "the daemon to answer", func() bool { return ask(address, "/metrics") != "" })
	ends(t, c)
}
