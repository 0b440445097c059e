package feed

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"sync"

	broker "github.com/mochi-mqtt/server/v2"
	"github.com/mochi-mqtt/server/v2/listeners"
	"github.com/mochi-mqtt/server/v2/packets"
	"github.com/rs/zerolog"
)

// clientBacklog is the number of messages that the embedded broker keeps for a
// client that is slow to read, before it drops some.
const clientBacklog = 65536

// BrokerOptions adjusts the embedded broker.
type BrokerOptions struct {
	Log zerolog.Logger // the broker's own messages go here, all at debug level
}

// EmbeddedBroker is an MQTT broker inside the program, for demonstration and
// trial: on loopback only, open to everyone there, and gone with the program.
type EmbeddedBroker struct {
	server   *broker.Server
	listener net.Listener
	closing  sync.Once
	closed   error
}

// StartBroker starts a broker on addr, host:port. The host must be loopback;
// an empty host is 127.0.0.1, and port 0 takes a free one.
func StartBroker(addr string, o BrokerOptions) (*EmbeddedBroker, error) {
	host, port, err := net.SplitHostPort(addr)
	if err != nil {
		return nil, fmt.Errorf("start the embedded broker on %q: write the address as 127.0.0.1:1883", addr)
	}
	if host == "" || host == "localhost" {
		host = "127.0.0.1"
	}
	if ip := net.ParseIP(host); ip == nil || !ip.IsLoopback() {
		return nil, fmt.Errorf("start the embedded broker on %s: it lets everyone in and so listens on loopback only: use 127.0.0.1:%s, or a broker of its own for other hosts", addr, port)
	}
	listener, err := net.Listen("tcp", net.JoinHostPort(host, port))
	if err != nil {
		return nil, fmt.Errorf("start the embedded broker: %w: choose another port, or 0 for a free one", err)
	}
	limits := broker.NewDefaultServerCapabilities()
	limits.MaximumClientWritesPending = clientBacklog
	server := broker.New(&broker.Options{
		InlineClient: true, Capabilities: limits,
		Logger: slog.New(quiet{zerolog.NewSlogHandler(o.Log)}),
	})
	err = server.AddHook(new(welcome), nil)
	if err == nil {
		err = server.AddListener(listeners.NewNet("loopback", listener))
	}
	if err == nil {
		err = server.Serve()
	}
	if err != nil {
		return nil, errors.Join(fmt.Errorf("start the embedded broker on %s: %w", addr, err), listener.Close())
	}
	return &EmbeddedBroker{server: server, listener: listener}, nil
}

// Addr is the address it listens on, host:port.
func (b *EmbeddedBroker) Addr() string { return b.listener.Addr().String() }

// URL is the address in the form that Broker takes.
func (b *EmbeddedBroker) URL() string { return "mqtt://" + b.Addr() }

// Publish sends a message to the broker's clients without a connection.
func (b *EmbeddedBroker) Publish(topic string, payload []byte, qos byte, retained bool) error {
	if err := b.server.Publish(topic, payload, retained, qos); err != nil {
		return fmt.Errorf("publish to %s on the embedded broker: %w", topic, err)
	}
	return nil
}

// Close ends the broker and its connections. It may be called more than once.
func (b *EmbeddedBroker) Close() error {
	b.closing.Do(func() {
		if err := b.server.Close(); err != nil {
			b.closed = fmt.Errorf("stop the embedded broker: %w", err)
		}
	})
	return b.closed
}

// quiet hands all log records on at debug level: what the broker finds worth
// a warning (a client that left without a goodbye) is daily life here.
type quiet struct{ slog.Handler }

func (q quiet) Enabled(ctx context.Context, _ slog.Level) bool {
	return q.Handler.Enabled(ctx, slog.LevelDebug)
}

func (q quiet) Handle(ctx context.Context, r slog.Record) error {
	r.Level = slog.LevelDebug
	return q.Handler.Handle(ctx, r)
}

func (q quiet) WithAttrs(a []slog.Attr) slog.Handler { return quiet{q.Handler.WithAttrs(a)} }

func (q quiet) WithGroup(name string) slog.Handler { return quiet{q.Handler.WithGroup(name)} }

// welcome lets every client in and everything through: whoever reaches
// loopback may.
type welcome struct{ broker.HookBase }

// ID names the hook in the broker's log.
func (*welcome) ID() string { return "welcome" }

// Provides says which questions the hook answers.
func (*welcome) Provides(question byte) bool {
	return question == broker.OnConnectAuthenticate || question == broker.OnACLCheck
}

// OnConnectAuthenticate lets a client connect.
func (*welcome) OnConnectAuthenticate(*broker.Client, packets.Packet) bool { return true }

// OnACLCheck lets a client read or write a topic.
func (*welcome) OnACLCheck(*broker.Client, string, bool) bool { return true }
