package mast

import (
	"context"
	"fmt"
	"io"
	"net"
	"net/url"
	"strconv"
	"strings"
	"time"

	"go.bug.st/serial"
)

// Forms are the ways to write a source, for messages.
const Forms = "serial:/dev/ttyUSB0?baud=4800, tcp:host:port, udp:address:port or stdin"

// The limits of a source.
const (
	dialTimeout = 5 * time.Second
	// silence on a TCP connection after which it is given up: an instrument
	// that was switched off does not say goodbye.
	silence = 30 * time.Second
)

// Source is where the lines of an instrument come from.
type Source struct {
	name string
	open func(context.Context) (io.ReadCloser, error)
	once bool // its end is the end
}

// String is the source as it was written.
func (s Source) String() string { return s.name }

// ParseSource reads a source as Forms says. stdin is what "stdin" stands for.
func ParseSource(text string, stdin io.Reader) (Source, error) {
	s := Source{name: text}
	kind, rest, _ := strings.Cut(text, ":")
	var err error
	switch kind {
	case "stdin":
		s.once = true
		s.open = func(context.Context) (io.ReadCloser, error) { return io.NopCloser(stdin), nil }
		if rest != "" || strings.Contains(text, ":") {
			err = fmt.Errorf("nothing follows stdin")
		}
	case "tcp", "udp":
		host, port, splitErr := net.SplitHostPort(rest)
		n, portErr := strconv.ParseUint(port, 10, 16)
		switch {
		case splitErr != nil || portErr != nil || (kind == "tcp" && (host == "" || n == 0)):
			err = fmt.Errorf("%q is not an address and a port", rest)
		case kind == "tcp":
			s.open = func(ctx context.Context) (io.ReadCloser, error) { return openTCP(ctx, rest) }
		default:
			s.open = func(ctx context.Context) (io.ReadCloser, error) { return openUDP(ctx, rest) }
		}
	case "serial":
		s.open, err = serialSource(rest)
	default:
		err = fmt.Errorf("%q is not a kind of source", kind)
	}
	if err != nil {
		return Source{}, fmt.Errorf("source %q: %w: write %s", text, err, Forms)
	}
	return s, nil
}

func openTCP(ctx context.Context, address string) (io.ReadCloser, error) {
	conn, err := (&net.Dialer{Timeout: dialTimeout}).DialContext(ctx, "tcp", address)
	if err != nil {
		return nil, fmt.Errorf("connect to the instrument: %w", err)
	}
	return &patient{Conn: conn}, nil
}

// patient gives up a connection on which nothing comes for too long. A timer
// closes it, since a deadline would need the time of day.
type patient struct{ net.Conn }

func (p *patient) Read(b []byte) (int, error) {
	timer := time.AfterFunc(silence, func() { _ = p.Conn.Close() }) // Read then returns its error
	defer timer.Stop()
	return p.Conn.Read(b)
}

func openUDP(ctx context.Context, address string) (io.ReadCloser, error) {
	conn, err := (&net.ListenConfig{}).ListenPacket(ctx, "udp", address)
	if err != nil {
		return nil, fmt.Errorf("listen for the instrument: %w", err)
	}
	return &datagrams{conn: conn}, nil
}

// datagrams is what comes over UDP as a stream: each datagram ends its last
// line, for one that is lost must not be glued to the next.
type datagrams struct {
	conn net.PacketConn
	rest []byte
	room [64 << 10]byte
}

func (d *datagrams) Read(b []byte) (int, error) {
	if len(d.rest) == 0 {
		n, _, err := d.conn.ReadFrom(d.room[:len(d.room)-1])
		if err != nil {
			return 0, err
		}
		d.room[n] = '\n'
		d.rest = d.room[:n+1]
	}
	n := copy(b, d.rest)
	d.rest = d.rest[n:]
	return n, nil
}

func (d *datagrams) Close() error { return d.conn.Close() }

// serialSource reads the path and the settings of a serial line. NMEA 0183 has
// 4800 baud, eight bits, no parity, one stop bit.
func serialSource(text string) (func(context.Context) (io.ReadCloser, error), error) {
	path, query, _ := strings.Cut(text, "?")
	settings, err := url.ParseQuery(query)
	if err != nil || path == "" {
		return nil, fmt.Errorf("%q is not a device and its settings", text)
	}
	mode := &serial.Mode{BaudRate: 4800, DataBits: 8, Parity: serial.NoParity, StopBits: serial.OneStopBit}
	for key, values := range settings {
		value := values[len(values)-1]
		n, err := strconv.Atoi(value)
		switch {
		case key == "baud" && err == nil && 300 <= n && n <= 4000000:
			mode.BaudRate = n
		case key == "data" && err == nil && (n == 7 || n == 8):
			mode.DataBits = n
		case key == "stop" && value == "1":
		case key == "stop" && value == "2":
			mode.StopBits = serial.TwoStopBits
		case key == "parity" && value == "none":
		case key == "parity" && value == "even":
			mode.Parity = serial.EvenParity
		case key == "parity" && value == "odd":
			mode.Parity = serial.OddParity
		default:
			return nil, fmt.Errorf("%s=%s: known are baud (such as 4800), data (7 or 8), parity (none, even or odd), stop (1 or 2)", key, value)
		}
	}
	return func(context.Context) (io.ReadCloser, error) {
		port, err := serial.Open(path, mode)
		if err != nil {
			return nil, fmt.Errorf("open the serial line %s: %w", path, err)
		}
		return port, nil
	}, nil
}
