// Package page takes an immutable view of what the daemon knows, and its
// history, and serves both over HTTP: one page for people and JSON for
// programs. It is the last stage on the way out; beside it stands publish.
//
// Without users it only reads, and serves this machine alone; see
// Options.Gate. Whoever changes something has logged in, and is named in the
// history. A view that is too old is never shown: every value of it
// becomes "no information".
package page

import (
	"context"
	"crypto/tls"
	"encoding/json"
	"errors"
	"fmt"
	stdlog "log"
	"net"
	"net/http"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/rs/zerolog"

	"sockline/alerting"
	"sockline/alerting/page/access"
	"sockline/sensors"
)

// MaxAge is the age from which a view is no information.
const MaxAge = 5 * time.Second

// EventQuery says which events are wanted. A zero From or To is an open end.
type EventQuery struct {
	From, To sensors.Instant // opened at or after From and before To
	Open     bool            // only those still open
	Limit    int             // at most so many, the newest

	// Empty ones do not matter.
	Runway, Operation string
	Kind, Cause       string
	Level             alerting.Level // at least, at any time
}

// Event is one event as it is listed.
type Event struct {
	ID      string
	Highest alerting.Level // that it had
	Object  []byte         // its newest alert object
}

// ErrNoEvent is what History.Event returns for an id it does not know.
var ErrNoEvent = errors.New("there is no event with this id")

// History is the record of past events, as much of it as the page needs. Its
// methods are called from many goroutines.
type History interface {
	// Events lists events, the newest first.
	Events(q EventQuery) ([]Event, error)
	// Event is every issue of one event as JSON objects, the oldest first;
	// ErrNoEvent if the id is unknown.
	Event(id string) ([]json.RawMessage, error)
}

// Options says what a Page serves. All fields are required but where it says so.
type Options struct {
	Airfield string // its name, for people
	Listen   string // the address it is to be served on; loopback only
	Exercise bool   // the whole program is an exercise
	View     func() *View
	Tape     *Tape
	People   People       // what can be done; required with Gate
	Gate     *access.Gate // who may do it; nil: nobody, and others than this machine see nothing
	TLS      *tls.Config  // nil: unencrypted, and on this machine only
	History  History
	Review   Review       // nil: nothing is worked out from the history
	Basis    func() Basis // nil: it does not say what it runs by
	Registry *prometheus.Registry
	Ready    func() []string  // why the program is not ready; nil: it is
	Now      func() time.Time // wall time
	Log      zerolog.Logger
}

// Page is the HTTP handler.
type Page struct {
	opts  Options
	mux   *http.ServeMux
	glass *glass // what a browser gets

	foreign *http.CrossOriginProtection

	streams chan struct{} // holds one for each open stream
	work    chan struct{} // holds one while something is worked out from the history
	ending  chan struct{} // closed when the server ends
	body    bodyCache
}

// New makes a page. It refuses a Listen address that others could reach where
// there are no users or no encryption.
func New(o Options) (*Page, error) {
	if err := o.checkListen(o.Listen); err != nil {
		return nil, err
	}
	if o.View == nil || o.Tape == nil || o.History == nil || o.Registry == nil || o.Now == nil {
		return nil, errors.New("the page needs View, Tape, History, Registry and Now")
	}
	if o.Ready == nil {
		o.Ready = func() []string { return nil }
	}
	g, err := newGlass()
	if err != nil {
		return nil, err
	}
	p := &Page{
		opts: o, glass: g,
		foreign: http.NewCrossOriginProtection(),
		streams: make(chan struct{}, maxStreams), ending: make(chan struct{}), work: make(chan struct{}, 1),
	}
	p.mux = p.routes()
	return p, nil
}

// checkListen refuses an address that others than this machine could reach
// where they could not be told apart, or would be overheard.
func (o *Options) checkListen(address string) error {
	host, _, err := net.SplitHostPort(address)
	switch {
	case err != nil:
		return fmt.Errorf("page address %q: %w; use 127.0.0.1:7625", address, err)
	case loopback(host):
		return nil
	case o.TLS == nil:
		return fmt.Errorf("page address %q can be reached from other machines, and the page is not encrypted; "+
			"name cert_file and key_file in [page], or use 127.0.0.1:<port>", address)
	case o.Gate == nil:
		return fmt.Errorf("page address %q can be reached from other machines, and the page has no users; "+
			"name a users_file in [page] and add users with \"sockline users add\", or use 127.0.0.1:<port>", address)
	}
	if n, err := o.Gate.Users(o.Now()); n == 0 {
		return errors.Join(fmt.Errorf("page address %q can be reached from other machines, and nobody could log in; "+
			"add users with \"sockline users add\", or use 127.0.0.1:<port>", address), err)
	}
	return nil
}

// loopback reports whether a host is this machine by its very spelling. Other
// names are not resolved: what they stand for may change.
func loopback(host string) bool {
	if host == "localhost" {
		return true
	}
	ip := net.ParseIP(host)
	return ip != nil && ip.IsLoopback()
}

// Limits of the server. A client that does not read is cut off, and never
// holds up anything but itself.
const (
	headerWithin   = 5 * time.Second
	readWithin     = 10 * time.Second
	writeWithin    = 15 * time.Second
	idleWithin     = time.Minute
	headerBytes    = 16 << 10
	shutdownWithin = 2 * time.Second
	// sendBuffer is what the system may hold for a client that does not read:
	// a few views of a large field, so that it is noticed within seconds.
	sendBuffer = 64 << 10
)

// smallBuffer bounds what is held for one connection.
func smallBuffer(ctx context.Context, c net.Conn) context.Context {
	if inner, ok := c.(interface{ NetConn() net.Conn }); ok { // below TLS
		c = inner.NetConn()
	}
	if tcp, ok := c.(*net.TCPConn); ok {
		_ = tcp.SetWriteBuffer(sendBuffer) // the usual size serves, too
	}
	return ctx
}

// Serve answers on a listener until ctx is done; it is called once. It refuses a listener that
// is not on this machine.
func (p *Page) Serve(ctx context.Context, l net.Listener) error {
	if err := p.opts.checkListen(l.Addr().String()); err != nil {
		return errors.Join(err, l.Close())
	}
	server := &http.Server{
		Handler:           p,
		ReadHeaderTimeout: headerWithin,
		ReadTimeout:       readWithin,
		WriteTimeout:      writeWithin,
		IdleTimeout:       idleWithin,
		MaxHeaderBytes:    headerBytes,
		ConnContext:       smallBuffer,
		TLSConfig:         p.opts.TLS,
		ErrorLog:          stdlog.New(p.opts.Log, "", 0), // its own goes to standard error, and waits for it
	}
	ended := make(chan error, 1)
	go func() {
		if p.opts.TLS != nil {
			ended <- server.ServeTLS(l, "", "")
		} else {
			ended <- server.Serve(l)
		}
	}()
	select {
	case err := <-ended:
		return fmt.Errorf("serve the page on %s: %w", l.Addr(), err)
	case <-ctx.Done():
	}
	close(p.ending) // streams would never end by themselves
	// The parent is done already, so the time to end is counted anew.
	limit, cancel := context.WithTimeout(context.WithoutCancel(ctx), shutdownWithin)
	defer cancel()
	err := server.Shutdown(limit)
	if errors.Is(err, context.DeadlineExceeded) {
		err = server.Close() // somebody does not read; nothing of value is cut
	}
	<-ended
	if err != nil {
		return fmt.Errorf("end the page on %s: %w", l.Addr(), err)
	}
	return nil
}
