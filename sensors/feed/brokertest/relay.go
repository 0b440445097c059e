package brokertest

import (
	"io"
	"net"
	"sync"
	"testing"
)

// Relay passes TCP connections on to an address until it is told to cut them.
type Relay struct {
	listener net.Listener
	target   string
	done     sync.WaitGroup

	mu     sync.Mutex
	conns  map[net.Conn]struct{}
	closed bool
}

// StartRelay listens on a free loopback port in front of target. It ends with
// the test.
func StartRelay(tb testing.TB, target string) *Relay {
	tb.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		tb.Fatalf("start a relay: %v", err)
	}
	r := &Relay{listener: l, target: target, conns: make(map[net.Conn]struct{})}
	r.done.Add(1)
	go r.accept()
	tb.Cleanup(r.Close)
	return r
}

// URL is the relay's address as an MQTT URL.
func (r *Relay) URL() string { return "mqtt://" + r.listener.Addr().String() }

// Cut closes all connections on both sides. New ones are accepted.
func (r *Relay) Cut() {
	r.mu.Lock()
	defer r.mu.Unlock()
	for c := range r.conns {
		c.Close()
	}
}

// Close ends the relay and waits for its goroutines.
func (r *Relay) Close() {
	r.listener.Close()
	r.mu.Lock()
	r.closed = true
	r.mu.Unlock()
	r.Cut()
	r.done.Wait()
}

func (r *Relay) accept() {
	defer r.done.Done()
	for {
		near, err := r.listener.Accept()
		if err != nil {
			return
		}
		far, err := net.Dial("tcp", r.target)
		if err != nil {
			near.Close()
			continue
		}
		r.mu.Lock()
		r.conns[near], r.conns[far] = struct{}{}, struct{}{}
		if r.closed { // accepted while closing: Cut has not seen it
			near.Close()
			far.Close()
		}
		r.mu.Unlock()
		r.done.Add(2)
		go r.pass(near, far)
		go r.pass(far, near)
	}
}

// pass copies one direction; the end of either ends both.
func (r *Relay) pass(from, to net.Conn) {
	defer r.done.Done()
	_, _ = io.Copy(to, from) // an error is an end like any other
	from.Close()
	to.Close()
	r.mu.Lock()
	delete(r.conns, from)
	delete(r.conns, to)
	r.mu.Unlock()
}
