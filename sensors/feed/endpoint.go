package feed

import (
	"bufio"
	"context"
	"crypto/rand"
	"crypto/tls"
	"crypto/x509"
	"encoding/hex"
	"errors"
	"fmt"
	mathrand "math/rand/v2"
	"net"
	"net/url"
	"os"
	"strings"
	"sync"
	"sync/atomic"
	"time"
)

// Broker says where an MQTT broker is and who we are to it.
type Broker struct {
	URL          string // mqtt://host:1883 or tcp://host:1883 in clear, mqtts://host:8883 with TLS
	Username     string
	Password     string // from the environment; PasswordFile is used when empty
	PasswordFile string // its first line is the password
	CAFile       string // PEM; the roots of the host when empty
	CertFile     string // PEM of a client certificate, together with KeyFile
	KeyFile      string
}

// The limits of one connection. They are for a local network; a link that
// cannot answer within seconds cannot carry wind either.
const (
	// retryPause is the longest time from one attempt to connect to the next,
	// the first connection included.
	retryPause       = 2 * time.Second
	retryJitter      = 500 * time.Millisecond // taken off at random
	dialTimeout      = 3 * time.Second
	handshakeTimeout = 3 * time.Second
	writeTimeout     = 3 * time.Second
	keepAlive        = 5 * time.Second
	pingTimeout      = 3 * time.Second
	// silenceLimit gives up a connection on which nothing arrived. A ping goes
	// out at most 6.25 s after the last packet (keepAlive, looked at every
	// quarter of it), so a live broker always answers before.
	silenceLimit = 9 * time.Second
	readBuffer   = 16 << 10
)

// endpoint is a checked Broker.
type endpoint struct {
	url      *url.URL
	username string
	password string
	tls      *tls.Config // nil in clear
}

// resolve checks a Broker and reads its files. Its errors name the place and
// the mend.
func (b Broker) resolve() (endpoint, error) {
	u, err := url.Parse(b.URL)
	if err != nil || u.Hostname() == "" {
		return endpoint{}, fmt.Errorf("broker address %q: write it as mqtt://host:1883 or mqtts://host:8883", b.URL)
	}
	if u.User != nil {
		return endpoint{}, fmt.Errorf("broker address of %s: it holds a user or a password: give the user by itself and the password in a file", u.Host)
	}
	e := endpoint{url: u, username: b.Username, password: b.Password}
	port := ""
	switch u.Scheme {
	case "mqtt", "tcp":
		port = "1883"
		if b.CAFile != "" || b.CertFile != "" || b.KeyFile != "" {
			return endpoint{}, fmt.Errorf("broker address %q: certificates are given but the address is in clear: write mqtts://", b.URL)
		}
	case "mqtts":
		port = "8883"
		if e.tls, err = b.tlsConfig(u.Hostname()); err != nil {
			return endpoint{}, err
		}
	default:
		return endpoint{}, fmt.Errorf("broker address %q: the scheme is %q: use mqtt:// or mqtts://", b.URL, u.Scheme)
	}
	if u.Port() == "" {
		u.Host = net.JoinHostPort(u.Hostname(), port)
	}
	if e.password == "" && b.PasswordFile != "" {
		text, err := os.ReadFile(b.PasswordFile)
		if err != nil {
			return endpoint{}, fmt.Errorf("read the broker password: %w: name a readable file", err)
		}
		e.password, _, _ = strings.Cut(string(text), "\n")
		e.password = strings.TrimSuffix(e.password, "\r")
	}
	if e.password != "" && e.username == "" {
		// The protocol forbids a password without a user, and the client
		// would drop it without a word.
		return endpoint{}, fmt.Errorf("broker %s: a password is given without a user: name the user too", u.Host)
	}
	return e, nil
}

func (b Broker) tlsConfig(host string) (*tls.Config, error) {
	c := &tls.Config{MinVersion: tls.VersionTLS12, ServerName: host}
	if b.CAFile != "" {
		pem, err := os.ReadFile(b.CAFile)
		if err != nil {
			return nil, fmt.Errorf("read the broker's CA certificate: %w: name a readable file", err)
		}
		c.RootCAs = x509.NewCertPool()
		if !c.RootCAs.AppendCertsFromPEM(pem) {
			return nil, fmt.Errorf("CA certificate %s: there is no PEM certificate in it: export it in PEM form", b.CAFile)
		}
	}
	if (b.CertFile == "") != (b.KeyFile == "") {
		return nil, fmt.Errorf("client certificate for %s: certificate and key belong together: give both files or neither", host)
	}
	if b.CertFile != "" {
		pair, err := tls.LoadX509KeyPair(b.CertFile, b.KeyFile)
		if err != nil {
			return nil, fmt.Errorf("load client certificate %s with key %s: %w: they must be PEM and match", b.CertFile, b.KeyFile, err)
		}
		c.Certificates = []tls.Certificate{pair}
	}
	return c, nil
}

// dial opens one connection; it ends early with ctx.
func (e endpoint) dial(ctx context.Context) (net.Conn, error) {
	ctx, cancel := context.WithTimeout(ctx, dialTimeout)
	defer cancel()
	dialer := &net.Dialer{}
	var (
		conn net.Conn
		err  error
	)
	if e.tls == nil {
		conn, err = dialer.DialContext(ctx, "tcp", e.url.Host)
	} else {
		conn, err = (&tls.Dialer{NetDialer: dialer, Config: e.tls}).DialContext(ctx, "tcp", e.url.Host)
	}
	if err != nil {
		return nil, fmt.Errorf("connect to broker %s: %w", e.url.Host, err)
	}
	return newLink(conn), nil
}

// link is a connection that cannot hang. The client sets no deadline of its
// own on reads or on pings, so that a ping can stay behind a full send buffer
// for minutes; here each write and each wait for the next bytes has one. Reads
// are buffered because the client asks for a packet's header byte by byte.
type link struct {
	net.Conn
	in *bufio.Reader
	// bounded is set while the client holds a deadline of its own (the
	// handshake), which is shorter and must not be moved.
	bounded atomic.Bool
}

func newLink(conn net.Conn) *link {
	l := &link{Conn: conn}
	l.in = bufio.NewReaderSize(lateReader{l}, readBuffer)
	return l
}

func (l *link) Read(p []byte) (int, error) { return l.in.Read(p) }

func (l *link) Write(p []byte) (int, error) {
	if !l.bounded.Load() {
		if err := l.SetWriteDeadline(time.Now().Add(writeTimeout)); err != nil {
			return 0, err
		}
	}
	return l.Conn.Write(p)
}

// SetDeadline is called by the client before the handshake, with its own bound
// that has our pause in it, and after it with zero.
func (l *link) SetDeadline(t time.Time) error {
	l.bounded.Store(!t.IsZero())
	if own := time.Now().Add(handshakeTimeout); t.After(own) {
		t = own
	}
	return l.Conn.SetDeadline(t)
}

// lateReader reads from the socket below a link's buffer.
type lateReader struct{ l *link }

func (r lateReader) Read(p []byte) (int, error) {
	if !r.l.bounded.Load() {
		if err := r.l.SetReadDeadline(time.Now().Add(silenceLimit)); err != nil {
			return 0, err
		}
	}
	n, err := r.l.Conn.Read(p)
	if err != nil && errors.Is(err, os.ErrDeadlineExceeded) {
		err = fmt.Errorf("nothing heard from the broker for %v: %w", silenceLimit, err)
	}
	return n, err
}

// pace keeps attempts to connect apart. The first after a quiet time goes at
// once: a connection that was merely cut is back without delay.
type pace struct {
	mu   sync.Mutex
	next time.Time // no attempt before
}

// wait returns when an attempt may be made, with an error if ctx ends first.
func (p *pace) wait(ctx context.Context) error {
	p.mu.Lock()
	defer p.mu.Unlock()
	timer := time.NewTimer(time.Until(p.next)) // at once if that is past
	defer timer.Stop()
	select {
	case <-ctx.Done():
		return ctx.Err()
	case now := <-timer.C:
		p.next = now.Add(retryPause - mathrand.N(retryJitter))
		return nil
	}
}

// uniqueID is name, host and a random part: two clients under one id would
// throw each other out for ever.
func uniqueID(name string) (string, error) {
	var salt [4]byte
	if _, err := rand.Read(salt[:]); err != nil {
		return "", fmt.Errorf("make a client id: %w", err)
	}
	host, err := os.Hostname()
	if err != nil {
		host = "host" // the random part alone keeps the id unique
	}
	host, _, _ = strings.Cut(host, ".")
	if len(host) > 20 {
		host = host[:20]
	}
	return name + "-" + host + "-" + hex.EncodeToString(salt[:]), nil
}
