package page

import (
	"context"
	"io"
	"net"
	"net/http"
	"strings"
	"testing"
	"time"
)

// TestServe runs the server on a socket and ends it, with a client that never
// reads to the end.
func TestServe(t *testing.T) {
	p, _ := serve(t, sample(0), nil)
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	ended := make(chan error, 1)
	go func() { ended <- p.Serve(ctx, l) }()

	stuck, err := net.Dial("tcp", l.Addr().String())
	if err != nil {
		t.Fatal(err)
	}
	defer stuck.Close()
	if _, err := io.WriteString(stuck, "GET / HTTP/1.1\r\n"); err != nil { // and no more
		t.Fatal(err)
	}
	r, err := http.Get("http://" + l.Addr().String() + "/healthz")
	if err != nil {
		t.Fatal(err)
	}
	object(t, r)
	r.Body.Close()
	cancel()
	select {
	case err := <-ended:
		if err != nil {
			t.Errorf("Serve ended with %v", err)
		}
	case <-time.After(shutdownWithin + 5*time.Second):
		t.Error("Serve did not end")
	}
}

func TestServeRefusesOtherMachines(t *testing.T) {
	p, _ := serve(t, sample(0), nil)
	l, err := net.Listen("tcp", "0.0.0.0:0")
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Serve(t.Context(), l); err == nil || !strings.Contains(err.Error(), "other machines") {
		t.Errorf("Serve on %s: %v", l.Addr(), err)
	}
}
