package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net"
	"net/http"
	"os"
	"path/filepath"
	"strconv"
	"time"

	"sockline/alerting/history"
	"sockline/alerting/history/backup"
)

// A daemon locks its history. Commands on the same machine reach it through
// the hatch: a socket in the history directory that only the owner of the
// directory can open, whatever the page asks of those who log in.

// hatchName is the socket's file.
const hatchName = "hatch.sock"

// faultTrailer ends every answer of the hatch: empty when all of it was sent.
const faultTrailer = "Sockline-Fault"

// held reports whether a daemon that answers holds the history in dir.
func held(ctx context.Context, dir string) bool {
	ctx, cancel := context.WithTimeout(ctx, time.Second)
	defer cancel()
	c, err := (&net.Dialer{}).DialContext(ctx, "unix", filepath.Join(dir, hatchName))
	return err == nil && c.Close() == nil
}

// errNoAnswer is a history that is locked by something without a hatch.
var errNoAnswer = errors.New("the history is held by a running program that does not answer: stop it, or run this as the user that it runs as")

// hatchSays asks the daemon that holds the history in dir. The answer's body
// fails where the daemon could not give all of it.
func hatchSays(ctx context.Context, dir, method, path string, body []byte) (io.ReadCloser, error) {
	socket := filepath.Join(dir, hatchName)
	client := &http.Client{Transport: &http.Transport{
		DialContext: func(ctx context.Context, _, _ string) (net.Conn, error) {
			return (&net.Dialer{}).DialContext(ctx, "unix", socket)
		},
		DisableKeepAlives: true,
	}}
	request, err := http.NewRequestWithContext(ctx, method, "http://history"+path, bytes.NewReader(body))
	if err != nil {
		return nil, fmt.Errorf("ask the daemon: %w", err)
	}
	response, err := client.Do(request)
	if err != nil {
		return nil, fmt.Errorf("ask the daemon that holds the history: %w", err)
	}
	if response.StatusCode != http.StatusOK {
		defer response.Body.Close()
		text, _ := io.ReadAll(io.LimitReader(response.Body, 4096))
		return nil, fmt.Errorf("the daemon answered: %s", bytes.TrimSpace(text))
	}
	return &hatchBody{response: response}, nil
}

// hatchBody ends with an error unless the daemon says that it is whole.
type hatchBody struct{ response *http.Response }

// Read reads on; at the end it looks for the trailer.
func (b *hatchBody) Read(p []byte) (int, error) {
	n, err := b.response.Body.Read(p)
	if !errors.Is(err, io.EOF) {
		return n, err
	}
	fault, ok := b.response.Trailer[faultTrailer]
	switch {
	case !ok || len(fault) == 0:
		return n, fmt.Errorf("the daemon's answer is cut off: %w", io.ErrUnexpectedEOF)
	case fault[0] != `""`:
		text, err := strconv.Unquote(fault[0])
		if err != nil {
			text = fault[0]
		}
		return n, fmt.Errorf("the daemon: %s", text)
	}
	return n, io.EOF
}

// Close lets the connection go.
func (b *hatchBody) Close() error { return b.response.Body.Close() }

// askHatch reads a JSON answer.
func askHatch(ctx context.Context, dir, method, path string, question, answer any) error {
	var body []byte
	if question != nil {
		var err error
		if body, err = json.Marshal(question); err != nil {
			return fmt.Errorf("ask the daemon: %w", err)
		}
	}
	in, err := hatchSays(ctx, dir, method, path, body)
	if err != nil {
		return err
	}
	defer in.Close()
	text, err := io.ReadAll(in)
	if err != nil {
		return err
	}
	if err := json.Unmarshal(text, answer); err != nil {
		return fmt.Errorf("what answers at %s is not the daemon: %w", hatchName, err)
	}
	return nil
}

// streamOf gives a history as a stream of files: out of its directory, or
// from the daemon that holds it.
func streamOf(ctx context.Context, dir string, span backup.Span) (io.ReadCloser, error) {
	if held(ctx, dir) {
		return hatchSays(ctx, dir, http.MethodGet, fmt.Sprintf("/files?from=%d&to=%d", span.From, span.To), nil)
	}
	store, err := readOnly(dir)
	if err != nil {
		return nil, err
	}
	in, out := io.Pipe()
	go func() {
		err := backup.Stream(ctx, store, span, out)
		out.CloseWithError(errors.Join(err, store.Close()))
	}()
	return in, nil
}

// readOnly opens a history, and says what to do where there is none.
func readOnly(dir string) (*history.Store, error) {
	store, err := history.ReadOnly(dir)
	switch {
	case errors.Is(err, history.ErrInUse):
		return nil, errNoAnswer
	case errors.Is(err, os.ErrNotExist):
		return nil, fmt.Errorf("%w: name the directory that holds journal.db; the daemon makes it when it first runs", err)
	}
	return store, err
}

// lookInto opens a history for reading, whether a daemon holds it or not: then
// it is a copy, with the days that the span touches, which goes when done is
// called.
func lookInto(ctx context.Context, dir string, span backup.Span) (store *history.Store, done func() error, err error) {
	if !held(ctx, dir) {
		if store, err = readOnly(dir); err != nil {
			return nil, nil, err
		}
		return store, store.Close, nil
	}
	in, err := streamOf(ctx, dir, span)
	if err != nil {
		return nil, nil, err
	}
	defer in.Close()
	tmp, err := os.MkdirTemp("", "sockline-history-")
	if err != nil {
		return nil, nil, fmt.Errorf("copy the history of the running daemon: %w", err)
	}
	if err = backup.Unpack(in, tmp); err == nil {
		store, err = history.ReadOnly(tmp)
	}
	if err != nil {
		return nil, nil, errors.Join(fmt.Errorf("copy the history of the running daemon: %w", err), os.RemoveAll(tmp))
	}
	return store, func() error { return errors.Join(store.Close(), os.RemoveAll(tmp)) }, nil
}

// writeWhole makes a file under another name, which it gets once it is whole
// and on disk. It replaces nothing.
func writeWhole(path string, fill func(io.Writer) error) error {
	if _, err := os.Lstat(path); err == nil {
		return fmt.Errorf("%s exists: it is not replaced; name a file that does not exist", path)
	}
	tmp, err := os.CreateTemp(filepath.Dir(path), "."+filepath.Base(path)+".*.new")
	if err != nil {
		return fmt.Errorf("write %s: %w", path, err)
	}
	if err = fill(tmp); err == nil {
		err = errors.Join(tmp.Chmod(0o640), tmp.Sync())
	}
	if err = errors.Join(err, tmp.Close()); err == nil {
		err = os.Rename(tmp.Name(), path)
	}
	if err != nil {
		return errors.Join(fmt.Errorf("write %s: %w", path, err), os.Remove(tmp.Name()))
	}
	return nil
}
