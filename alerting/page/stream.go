package page

import (
	"bytes"
	"encoding/json"
	"fmt"
	"net/http"
	"time"
)

// Limits of a stream.
const (
	maxStreams = 512
	// beatEvery is how long a stream is silent at most: a reader that hears
	// nothing for MaxAge takes everything for unknown.
	beatEvery = 1500 * time.Millisecond
	// nowEvery bounds how often the whole view is sent. Issues of alerts go out
	// at once.
	nowEvery = 200 * time.Millisecond
	// stuckAfter is how long one write may take before the reader is cut.
	stuckAfter = 10 * time.Second
	// retryAfter is how long a browser waits before it comes back.
	retryAfter = time.Second
)

// stream sends what happens as server-sent events (WHATWG HTML, "Server-sent
// events"): every issue of an alert once and in order, and the whole view
// whenever there is a new one. A reader that comes back with the id of the last
// event it had is first given what it missed. Every event carries such an id,
// so that a cut before the first alert misses nothing either.
func (p *Page) stream(w http.ResponseWriter, r *http.Request) {
	select {
	case p.streams <- struct{}{}:
		defer func() { <-p.streams }()
	default:
		w.Header().Set("Retry-After", "5")
		p.problem(w, http.StatusServiceUnavailable, "too-many-streams", "There are too many streams.",
			fmt.Sprintf("%d are open; close some, or ask for /api/v1/now instead.", maxStreams))
		return
	}
	out := newReader(w, r)
	h := w.Header()
	h.Set("Content-Type", "text/event-stream")
	h.Set("X-Accel-Buffering", "no") // for a proxy in front
	if r.Method == http.MethodHead {
		return
	}
	fmt.Fprintf(&out.buf, "retry: %d\n\n", retryAfter.Milliseconds())
	last := r.Header.Get("Last-Event-ID")
	if last == "" {
		// A page that opens its stream anew cannot set the header.
		last = r.URL.Query().Get("after")
	}
	tape := p.opts.Tape
	at := tape.head()
	if last != "" {
		if n, ok := tape.place(last); ok && n <= at {
			at = n
		} else {
			p.resync(&out.buf, at)
		}
	}
	p.follow(out, at)
}

// reader is one stream on its way to somebody.
type reader struct {
	w       http.ResponseWriter
	control *http.ResponseController
	done    <-chan struct{}
	buf     bytes.Buffer
}

func newReader(w http.ResponseWriter, r *http.Request) *reader {
	out := &reader{w: w, control: http.NewResponseController(w), done: r.Context().Done()}
	// The limits of an ordinary request would end the stream. An error means
	// that there are none here.
	_ = out.control.SetReadDeadline(time.Time{})
	_ = out.control.SetWriteDeadline(time.Time{})
	return out
}

// send writes what is in the buffer; false if the reader is gone or does not
// read. The deadline is set by a timer when it is due, since this package knows
// no time of day.
func (o *reader) send() bool {
	cut := time.AfterFunc(stuckAfter, func() { _ = o.control.SetWriteDeadline(time.Unix(1, 0)) })
	defer cut.Stop()
	if _, err := o.w.Write(o.buf.Bytes()); err != nil {
		return false
	}
	o.buf.Reset()
	return o.control.Flush() == nil
}

// follow sends everything after the issue with the number at until the reader
// goes, is cut, or the server ends.
func (p *Page) follow(out *reader, at uint64) {
	tape := p.opts.Tape
	beat, pause := time.NewTimer(beatEvery), time.NewTimer(0)
	defer beat.Stop()
	defer pause.Stop()
	var shown *View
	rested := false // nowEvery has passed since the last view
	for {
		changed := tape.next() // before looking: nothing slips in between
		issues, ok := tape.after(at)
		if !ok { // too slow for the tape
			at = tape.head()
			p.resync(&out.buf, at)
		}
		for _, object := range issues {
			at++
			event(&out.buf, "alert", tape.id(at), object)
		}
		if v, _ := p.current(); v != nil && v != shown && rested {
			if body, err := p.nowBody(v); err == nil {
				event(&out.buf, "now", tape.id(at), body)
			}
			shown, rested = v, false
			pause.Reset(nowEvery)
		}
		if out.buf.Len() > 0 {
			if !out.send() {
				return
			}
			beat.Reset(beatEvery)
		}
		select {
		case <-changed:
		case <-pause.C:
			rested = true
		case <-beat.C:
			out.buf.WriteString(": beat\n\n")
		case <-out.done:
			return
		case <-p.ending:
			return
		}
	}
}

// resync tells a reader that it may have missed issues: what follows is the
// whole state.
func (p *Page) resync(buf *bytes.Buffer, at uint64) {
	body, err := json.Marshal(struct {
		Why string `json:"why"`
		marks
	}{"What was missed is no longer kept, or belongs to another run of the program.", p.marks()})
	if err != nil { // texts always have a JSON form
		return
	}
	event(buf, "resync", p.opts.Tape.id(at), body)
}

// event writes one event. The data is one line.
func event(buf *bytes.Buffer, name, id string, data []byte) {
	fmt.Fprintf(buf, "event: %s\nid: %s\ndata: ", name, id)
	buf.Write(data)
	buf.WriteString("\n\n")
}
