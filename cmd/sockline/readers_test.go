package main

import (
	"io"
	"net"
	"os"
	"path/filepath"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"sockline/sensors/feed/brokertest"
)

// TestReadersHoldUpNoStep opens 200 streams, of which 50 never read, to a
// daemon: its steps go on as they did, and the stuck ones are cut.
func TestReadersHoldUpNoStep(t *testing.T) {
	readers, stuck := 30, 10
	if os.Getenv("SOCKLINE_LONG") != "" {
		readers, stuck = 150, 50
	}
	broker := brokertest.Start(t)
	h := newHurry(10) // ten steps a second: more than ever is asked of it
	cfg := mustLoad(t, site(t, broker.URL(), filepath.Join(t.TempDir(), "history")))
	blow(t, cfg, steady, broker.URL(), h)
	d := startDaemon(t, cfg, h.clock(t), "")
	until(t, "a step", func() bool { return d.board.view.Load() != nil })
	open := func(buffer int) net.Conn {
		c, err := net.Dial("tcp", d.listener.Addr().String())
		if err != nil {
			t.Fatal(err)
		}
		t.Cleanup(func() { c.Close() })
		if buffer > 0 {
			if err := c.(*net.TCPConn).SetReadBuffer(buffer); err != nil {
				t.Fatal(err)
			}
		}
		if _, err := io.WriteString(c, "GET /api/v1/stream HTTP/1.1\r\nHost: 127.0.0.1\r\n\r\n"); err != nil {
			t.Fatal(err)
		}
		return c
	}
	var got atomic.Int64
	var all sync.WaitGroup
	conns := make([]net.Conn, readers)
	for i := range conns {
		conns[i] = open(0)
		all.Go(func() {
			n, _ := io.Copy(io.Discard, conns[i]) // ends when it is closed
			got.Add(n)
		})
	}
	gone := make(chan struct{}, stuck)
	for range stuck {
		c := open(4096)
		go func() {
			tick := time.NewTicker(100 * time.Millisecond)
			defer tick.Stop()
			for range tick.C { // what is written there is waited for by nobody
				if _, err := c.Write([]byte("\r\n")); err != nil {
					gone <- struct{}{}
					return
				}
			}
		}()
	}
	before, begun := d.loop.steps.Load(), time.Now()
	limit := time.NewTimer(patience)
	defer limit.Stop()
	for range stuck {
		select {
		case <-gone:
		case <-limit.C:
			t.Fatal("a stuck reader is still there")
		}
	}
	took := time.Since(begun)
	if took > 15*time.Second {
		t.Errorf("the last stuck reader was cut after %s, want 15 s at most", took)
	}
	// The step that is shown keeps up with the clock of the readings: that is
	// lateness, a step, and whatever the machine is busy with besides.
	steps := d.loop.steps.Load() - before
	behind := h.now().Sub(d.board.view.Load().At.Time())
	if want := uint64(took.Seconds() * h.factor * 0.8); steps < want || behind > 60*time.Second {
		t.Errorf("%d steps in %s, want %d at least; the last one is %s behind", steps, took, want, behind)
	}
	for _, c := range conns {
		c.Close()
	}
	all.Wait()
	if got.Load() < int64(readers)*1000 {
		t.Errorf("%d readers had %d bytes", readers, got.Load())
	}
	t.Logf("%d streams, %d stuck: cut within %s; %d steps meanwhile, %s behind in event time", readers+stuck, stuck, took, steps, behind)
}
