package main

import (
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
	"sockline/sensors"
)

// noteWait is how long a note may take to be on disk.
const noteWait = 10 * time.Second

// openHatch answers the commands of this machine: see hatch.go. Without it
// everything else goes on, so that what fails here is only logged.
func (d *daemon) openHatch() {
	path := filepath.Join(d.archive.dir, hatchName)
	// Only who holds the history gets here: what is there was left behind.
	if err := os.Remove(path); err != nil && !errors.Is(err, os.ErrNotExist) {
		d.log.Warn().Err(err).Msg("the socket for commands cannot be made; they work once the daemon is stopped")
		return
	}
	listener, err := net.Listen("unix", path)
	if err == nil {
		err = os.Chmod(path, 0o600)
	}
	if err != nil {
		d.log.Warn().Err(err).Str("socket", path).Msg("the socket for commands cannot be made; they work once the daemon is stopped")
		return
	}
	server := &http.Server{Handler: d.hatch(), ReadHeaderTimeout: 5 * time.Second}
	done := make(chan struct{})
	go func() {
		defer close(done)
		if err := server.Serve(listener); !errors.Is(err, http.ErrServerClosed) {
			d.log.Warn().Err(err).Msg("commands are no longer answered")
		}
	}()
	d.archive.hatch = func(stop context.Context) error {
		return errors.Join(server.Close(), ended(stop, done))
	}
}

// hatch are the questions that are answered.
func (d *daemon) hatch() http.Handler {
	mux := http.NewServeMux()
	mux.HandleFunc("GET /files", d.archive.answer(func(r *http.Request, s *history.Store, w io.Writer) error {
		span := backup.Span{}
		for name, at := range map[string]*sensors.Instant{"from": &span.From, "to": &span.To} {
			n, err := strconv.ParseInt(r.FormValue(name), 10, 64)
			if err != nil {
				return fmt.Errorf("%s: %w", name, err)
			}
			*at = sensors.Instant(n)
		}
		return backup.Stream(r.Context(), s, span, w)
	}))
	mux.HandleFunc("GET /verify", d.archive.answer(func(r *http.Request, s *history.Store, w io.Writer) error {
		var known history.Head
		if _, err := fmt.Sscan(r.FormValue("records"), &known.Seq); err != nil {
			return fmt.Errorf("records: %w", err)
		}
		if err := known.Hash.UnmarshalText([]byte(r.FormValue("sha256"))); err != nil {
			return err
		}
		report, err := s.VerifyAgainst(known)
		if err != nil {
			return err
		}
		return json.NewEncoder(w).Encode(report)
	}))
	mux.HandleFunc("POST /notes", d.archive.answer(func(r *http.Request, s *history.Store, w io.Writer) error {
		var n history.Note
		if err := json.NewDecoder(io.LimitReader(r.Body, maxNote+4096)).Decode(&n); err != nil {
			return fmt.Errorf("read the note: %w", err)
		}
		ctx, cancel := context.WithTimeout(r.Context(), noteWait)
		defer cancel()
		seq, err := d.archive.note(ctx, s, n, sensors.At(time.Now()))
		if err != nil {
			return err
		}
		return json.NewEncoder(w).Encode(noted{Record: seq})
	}))
	return mux
}

// noted is the answer to a note.
type noted struct {
	Record uint64 `json:"record"` // its place in the journal
}

// note records a note on an event that exists.
func (a *archive) note(ctx context.Context, s *history.Store, n history.Note, at sensors.Instant) (uint64, error) {
	if _, err := s.Event(n.Event); err != nil {
		return 0, err
	}
	e, err := history.EntryOf(at, n)
	if err != nil {
		return 0, err
	}
	a.mu.Lock()
	w := a.writer
	a.mu.Unlock()
	return w.RecordDurably(ctx, e)
}

// answer makes a handler that says at its end whether it could do it all.
func (a *archive) answer(fn func(*http.Request, *history.Store, io.Writer) error) http.HandlerFunc {
	return func(w http.ResponseWriter, r *http.Request) {
		store, err := a.reading()
		if err != nil {
			http.Error(w, err.Error(), http.StatusServiceUnavailable)
			return
		}
		w.Header().Set("Trailer", faultTrailer)
		if f, ok := w.(http.Flusher); ok {
			f.Flush() // a trailer follows even where nothing else does
		}
		fault := ""
		if err := fn(r, store, w); err != nil {
			fault = err.Error()
		}
		w.Header().Set(faultTrailer, strconv.QuoteToASCII(fault))
	}
}
