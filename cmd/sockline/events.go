package main

import (
	"bytes"
	"context"
	"crypto/tls"
	"encoding/json"
	"encoding/pem"
	"errors"
	"flag"
	"fmt"
	"io"
	"net"
	"net/http"
	"os"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/history/backup"
)

// eventFlags are the flags that both commands about events have.
type eventFlags struct {
	config, directory *string
	output            *output
}

func defineEventFlags(fs *flag.FlagSet) eventFlags {
	return eventFlags{
		config:    configFlag(fs),
		directory: fs.String("history", "", "history `DIRECTORY`, instead of the one that the configuration names"),
		output:    outputFlag(fs),
	}
}

func eventsListCommand() command {
	return command{
		name: "events list", summary: "list the alerts that are kept in the history, newest first",
		setup: func(fs *flag.FlagSet) action {
			flags := defineEventFlags(fs)
			from := instantFlag(fs, "from", "only events opened at or after this `TIME`")
			to := instantFlag(fs, "to", "only events opened before this `TIME`")
			open := fs.Bool("open", false, "only events that are open")
			limit := fs.Int("limit", 100, "at most this `NUMBER`, from 1 to 1000")
			return func(ctx context.Context, p *program, _ []string) error {
				if err := spanError(*from, *to); err != nil {
					return err
				}
				if *limit < 1 || *limit > 1000 {
					return usagef("--limit %d: choose from 1 to 1000", *limit)
				}
				source, err := flags.source()
				if err != nil {
					return err
				}
				events, err := source.list(ctx, history.Filter{From: *from, To: *to, Open: *open, Limit: *limit})
				if err != nil {
					return err
				}
				return printEvents(p, "events", "", events, flags.output.json())
			}
		},
	}
}

func eventsShowCommand() command {
	return command{
		name: "events show", summary: "print every issue of one alert, oldest first", operands: "ID",
		setup: func(fs *flag.FlagSet) action {
			flags := defineEventFlags(fs)
			return func(ctx context.Context, p *program, operands []string) error {
				if len(operands) != 1 {
					return usagef("name one event by its id; \"sockline events list\" lists them")
				}
				source, err := flags.source()
				if err != nil {
					return err
				}
				issues, err := source.show(ctx, operands[0])
				if err != nil {
					return err
				}
				return printEvents(p, "issues", operands[0], issues, flags.output.json())
			}
		},
	}
}

// eventSource is where the events come from: the directory, or the daemon
// that holds it.
type eventSource struct {
	directory string
	listen    string // address of the daemon's page; empty if it is not known
	cert      string // file of its certificate; empty where it has none
}

// source is where the flags say the events are.
func (f eventFlags) source() (eventSource, error) {
	if (*f.config == "") == (*f.directory == "") {
		return eventSource{}, usagef("give either --config FILE or --history DIRECTORY")
	}
	if *f.directory != "" {
		return eventSource{directory: *f.directory}, nil
	}
	cfg, err := loadConfig(*f.config)
	if err != nil {
		return eventSource{}, err
	}
	return eventSource{directory: cfg.History.Directory, listen: cfg.Page.Listen, cert: cfg.Page.CertFile}, nil
}

// open opens the directory. A nil store without an error says that a daemon
// holds it and is to be asked.
func (s eventSource) open() (*history.Store, error) {
	store, err := history.ReadOnly(s.directory)
	if errors.Is(err, history.ErrInUse) {
		if s.listen == "" {
			return nil, fmt.Errorf("%w; give --config FILE, which names that address", err)
		}
		return nil, nil
	}
	if errors.Is(err, os.ErrNotExist) {
		return nil, fmt.Errorf("%w: the daemon keeps its history there once it has run", err)
	}
	return store, err
}

// list gives the newest object of each selected event.
func (s eventSource) list(ctx context.Context, f history.Filter) ([]json.RawMessage, error) {
	store, done, err := lookInto(ctx, s.directory, backup.Nothing())
	if err != nil {
		return nil, err
	}
	// The store counts an event by when it was open; here, as with the page,
	// it counts by when it was opened.
	limit := f.Limit
	if f.From != 0 {
		f.Limit = 0
	}
	events, err := store.Events(f)
	var objects []json.RawMessage
	for _, e := range events {
		if e.Opened >= f.From && len(objects) < limit {
			objects = append(objects, e.Object)
		}
	}
	return objects, errors.Join(err, done())
}

// show gives every issue of an event.
func (s eventSource) show(ctx context.Context, id string) ([]json.RawMessage, error) {
	store, done, err := lookInto(ctx, s.directory, backup.Nothing())
	if err != nil {
		return nil, err
	}
	event, err := store.Event(id)
	issues := make([]json.RawMessage, len(event.Objects))
	for i, object := range event.Objects {
		issues[i] = object
	}
	return issues, errors.Join(err, done())
}

// The bounds of a question to the daemon.
const (
	askTimeout = 10 * time.Second
	askMost    = 64 << 20 // bytes of an answer: a thousand events have a few MB
)

// ask puts a question to the daemon and reads its answer.
func (s eventSource) ask(ctx context.Context, path string, answer any) error {
	ctx, cancel := context.WithTimeout(ctx, askTimeout)
	defer cancel()
	client, scheme, err := s.client()
	if err != nil {
		return err
	}
	defer client.CloseIdleConnections()
	request, err := http.NewRequestWithContext(ctx, http.MethodGet, scheme+s.address()+path, nil)
	if err != nil {
		return fmt.Errorf("ask the daemon: %w", err)
	}
	response, err := client.Do(request)
	if err != nil {
		return fmt.Errorf("the history is held by a running daemon, which did not answer: %w", err)
	}
	defer response.Body.Close()
	body, err := io.ReadAll(io.LimitReader(response.Body, askMost))
	if err != nil {
		return fmt.Errorf("ask the daemon at %s: %w", s.listen, err)
	}
	if response.StatusCode != http.StatusOK {
		// The daemon explains itself as RFC 9457 has it.
		var problem struct{ Title, Detail string }
		if json.Unmarshal(body, &problem) != nil || problem.Title == "" {
			problem.Title = response.Status
		}
		return fmt.Errorf("the daemon at %s answered: %s %s", s.listen, problem.Title, problem.Detail)
	}
	if err := json.Unmarshal(body, answer); err != nil {
		return fmt.Errorf("what answers at %s is not the daemon: %w", s.listen, err)
	}
	return nil
}

// client speaks to the page. Over TLS it trusts the very certificate that the
// configuration names: on this machine the page is asked by an address that no
// authority vouches for.
func (s eventSource) client() (c *http.Client, scheme string, err error) {
	t := &http.Transport{}
	if s.cert == "" {
		return &http.Client{Transport: t}, "http://", nil
	}
	text, err := os.ReadFile(s.cert)
	if err != nil {
		return nil, "", fmt.Errorf("read the certificate of the page: %w", err)
	}
	block, _ := pem.Decode(text)
	if block == nil {
		return nil, "", fmt.Errorf("there is no certificate in %s", s.cert)
	}
	t.TLSClientConfig = &tls.Config{
		InsecureSkipVerify: true, // by name; what follows is stricter
		VerifyConnection: func(state tls.ConnectionState) error {
			if !bytes.Equal(state.PeerCertificates[0].Raw, block.Bytes) {
				return fmt.Errorf("what answers at %s has another certificate than %s", s.listen, s.cert)
			}
			return nil
		},
	}
	return &http.Client{Transport: t}, "https://", nil
}

// address is where to ask: the page's address, on this machine where it names
// no host or all of them.
func (s eventSource) address() string {
	host, port, err := net.SplitHostPort(s.listen)
	if ip := net.ParseIP(host); err == nil && (host == "" || ip != nil && ip.IsUnspecified()) {
		return net.JoinHostPort("127.0.0.1", port)
	}
	return s.listen
}

// printEvents prints alert objects. As JSON they stand under a name, as the
// daemon answers; as text each has its times and its sentence.
func printEvents(p *program, name, id string, objects []json.RawMessage, asJSON bool) error {
	if asJSON {
		if objects == nil {
			objects = []json.RawMessage{} // an empty list, not null
		}
		out := map[string]any{name: objects, "notice": alerting.Notice}
		if id != "" {
			out["id"] = id
		}
		return printJSON(p, out)
	}
	var b strings.Builder
	for _, object := range objects {
		if err := eventText(&b, object); err != nil {
			return fmt.Errorf("an alert object in the history: %w", err)
		}
	}
	if len(objects) == 0 {
		b.WriteString("No event is kept for what was asked.\n")
	}
	_, err := fmt.Fprintf(p.stdout, "%s%s\n", b.String(), alerting.Notice)
	return err
}

// eventText is an alert object in three lines.
func eventText(b *strings.Builder, object json.RawMessage) error {
	var a struct {
		ID, Text, State string
		Opened, Updated time.Time
		Closed          *time.Time
		Revision        int
		Recorded        bool
	}
	if err := json.Unmarshal(object, &a); err != nil {
		return err
	}
	const layout = "2006-01-02 15:04:05"
	until := "open, last issued " + a.Updated.Format(layout) + " UTC"
	if a.Closed != nil {
		until = "closed " + a.Closed.Format(layout) + " UTC"
	}
	fmt.Fprintf(b, "%s\n  opened %s UTC, %s, issue %d\n  %s\n", a.ID, a.Opened.Format(layout), until, a.Revision, a.Text)
	return nil
}
