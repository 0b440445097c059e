package main

import (
	"fmt"
	"net"
	"os"
	"strconv"
	"strings"
	"time"
)

// notifier tells a service manager about the state of the program, by the
// protocol of sd_notify(3): lines NAME=value in one datagram to the socket
// that NOTIFY_SOCKET names. Without that variable it says nothing.
type notifier struct {
	conn  net.Conn
	every time.Duration // how often the watchdog wants to hear from us; 0: never
}

// newNotifier reads NOTIFY_SOCKET and WATCHDOG_USEC from the environment that
// getenv gives.
func newNotifier(getenv func(string) string) (*notifier, error) {
	path := getenv("NOTIFY_SOCKET")
	if path == "" {
		return &notifier{}, nil
	}
	if strings.HasPrefix(path, "@") {
		path = "\x00" + path[1:] // the abstract name space of Linux
	}
	conn, err := net.Dial("unixgram", path)
	if err != nil {
		return nil, fmt.Errorf("reach the service manager at NOTIFY_SOCKET: %w", err)
	}
	n := &notifier{conn: conn}
	// WATCHDOG_PID, when set, says for which process the time is meant.
	if pid := getenv("WATCHDOG_PID"); pid == "" || pid == strconv.Itoa(os.Getpid()) {
		if usec, err := strconv.ParseInt(getenv("WATCHDOG_USEC"), 10, 64); err == nil && usec > 0 {
			n.every = time.Duration(usec) * time.Microsecond / 2
		}
	}
	return n, nil
}

// say sends lines. A manager that is gone cannot be told so: errors are of no
// use to anyone.
func (n *notifier) say(lines ...string) {
	if n.conn != nil {
		_, _ = n.conn.Write([]byte(strings.Join(lines, "\n")))
	}
}

func (n *notifier) close() {
	if n.conn != nil {
		_ = n.conn.Close()
	}
}

// watchdog decides when the service manager may hear that all is well: only
// when both the evaluation and the history have got on since the last time.
type watchdog struct {
	every          time.Duration
	last           time.Time
	steps, history uint64
}

// due reports whether to say WATCHDOG=1 at now, given how far both have got.
func (w *watchdog) due(now time.Time, steps, history uint64) bool {
	if w.every <= 0 || now.Sub(w.last) < w.every/2 || steps == w.steps || history == w.history {
		return false
	}
	w.last, w.steps, w.history = now, steps, history
	return true
}
