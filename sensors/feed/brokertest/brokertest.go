// Package brokertest runs a real mosquitto on loopback for tests: it takes a
// configuration and gives an address, and can stop, kill, freeze and restart
// what listens there; a relay in front of it can cut connections. Only tests
// use it, those of package feed first.
package brokertest

import (
	"bytes"
	"context"
	"fmt"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"
)

// startTimeout bounds the wait for a broker to listen, or to end.
const startTimeout = 10 * time.Second

// Broker is one mosquitto process after another on the same port.
type Broker struct {
	tb     testing.TB
	binary string
	config string
	addr   string

	process *exec.Cmd
	ended   chan struct{} // closed when process has ended
	output  *lockedBuffer
}

// Start runs mosquitto with the given lines added to a configuration that
// listens on a free loopback port. Anonymous clients are let in unless a line
// says otherwise. The test is skipped where mosquitto is missing. The broker
// ends with the test.
func Start(tb testing.TB, lines ...string) *Broker {
	tb.Helper()
	b := &Broker{tb: tb, binary: find(tb), config: filepath.Join(tb.TempDir(), "mosquitto.conf")}
	port := freePort(tb)
	b.addr = fmt.Sprintf("127.0.0.1:%d", port)
	text := fmt.Sprintf("listener %d 127.0.0.1\nset_tcp_nodelay true\n", port)
	if os.Geteuid() == 0 {
		text += "user root\n" // it could not read the test's files as another user
	}
	extra := strings.Join(lines, "\n")
	if !strings.Contains(extra, "allow_anonymous") {
		text += "allow_anonymous true\n"
	}
	if err := os.WriteFile(b.config, []byte(text+extra+"\n"), 0o600); err != nil {
		tb.Fatalf("write the broker's configuration: %v", err)
	}
	tb.Cleanup(b.Kill)
	b.Run()
	return b
}

func find(tb testing.TB) string {
	for _, name := range []string{"mosquitto", "/usr/sbin/mosquitto", "/usr/local/sbin/mosquitto"} {
		if path, err := exec.LookPath(name); err == nil {
			return path
		}
	}
	tb.Skip("SKIPPED, NOT TESTED: there is no mosquitto on this machine; install it (apt-get install mosquitto)")
	return ""
}

func freePort(tb testing.TB) int {
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		tb.Fatalf("find a free port: %v", err)
	}
	defer l.Close()
	return l.Addr().(*net.TCPAddr).Port
}

// Addr is host:port, the same over restarts.
func (b *Broker) Addr() string { return b.addr }

// URL is the address as an MQTT URL.
func (b *Broker) URL() string { return "mqtt://" + b.addr }

// Run starts the process, which must not be running, and returns when it
// listens.
func (b *Broker) Run() {
	b.tb.Helper()
	b.process = exec.Command(b.binary, "-c", b.config)
	b.output = &lockedBuffer{}
	b.process.Stdout, b.process.Stderr = b.output, b.output
	if err := b.process.Start(); err != nil {
		b.tb.Fatalf("start mosquitto: %v", err)
	}
	ended := make(chan struct{})
	b.ended = ended
	go func(p *exec.Cmd) {
		_ = p.Wait() // a killed process reports so; that is what was asked for
		close(ended)
	}(b.process)

	ctx, cancel := context.WithTimeout(context.Background(), startTimeout)
	defer cancel()
	tick := time.NewTicker(5 * time.Millisecond)
	defer tick.Stop()
	for {
		if conn, err := (&net.Dialer{}).DialContext(ctx, "tcp", b.addr); err == nil {
			conn.Close()
			return
		}
		select {
		case <-b.ended:
			b.tb.Fatalf("mosquitto ended at once; it said:\n%s", b.output)
		case <-ctx.Done():
			b.tb.Fatalf("mosquitto does not listen on %s after %v; it said:\n%s", b.addr, startTimeout, b.output)
		case <-tick.C:
		}
	}
}

// Kill ends the process without a goodbye and waits for its end.
func (b *Broker) Kill() { b.end(syscall.SIGKILL) }

// Stop ends the process in order and waits for its end.
func (b *Broker) Stop() { b.end(syscall.SIGTERM) }

func (b *Broker) end(s syscall.Signal) {
	if b.process == nil || b.process.Process == nil {
		return
	}
	b.signal(s)
	select {
	case <-b.ended:
	case <-time.After(startTimeout):
		b.tb.Errorf("mosquitto did not end within %v of signal %v", startTimeout, s)
	}
}

func (b *Broker) signal(s syscall.Signal) {
	select {
	case <-b.ended:
		return // its id may belong to another process by now
	default:
	}
	if err := b.process.Process.Signal(s); err != nil && b.tb.Context().Err() == nil {
		b.tb.Logf("signal %v to mosquitto: %v", s, err)
	}
}

// lockedBuffer collects the output of a process.
type lockedBuffer struct {
	mu sync.Mutex
	b  bytes.Buffer
}

func (l *lockedBuffer) Write(p []byte) (int, error) {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.b.Write(p)
}

func (l *lockedBuffer) String() string {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.b.String()
}
