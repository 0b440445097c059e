package webhook

import (
	"bytes"
	"context"
	"crypto/hmac"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"net/http"
	"net/http/httptrace"
	"net/url"
	"strconv"
	"sync/atomic"
	"time"
)

// The headers of every request. The seal is there only if there is a secret.
const (
	HeaderSent    = "Sockline-Sent"    // when this try was made, RFC 3339
	HeaderSeal    = "Sockline-Seal"    // see Seal
	HeaderEvent   = "Sockline-Event"   // the id of the event, the same at each repeat
	HeaderDelayed = "Sockline-Delayed" // "true" where the event is told late
)

// HeartbeatType is the CloudEvents type of a heartbeat.
const HeartbeatType = "sockline.heartbeat"

// beatAlert is what a heartbeat has in the place of an alert's id.
const beatAlert = "heartbeat"

// typeOf is the CloudEvents type of an event.
func typeOf(e *Event) string {
	if e.Alert == beatAlert {
		return HeartbeatType
	}
	switch e.Phase {
	case Opening:
		return "sockline.alert.opened"
	case Closing:
		return "sockline.alert.closed"
	}
	return "sockline.alert.updated"
}

func eventID(alert string, revision int) string { return alert + "/" + strconv.Itoa(revision) }

// Heartbeat is the event of a heartbeat; status is the status object.
func Heartbeat(instance string, e Event) Event {
	e.ID = beatAlert + "/" + instance + "/" + strconv.FormatInt(int64(e.Time)/1000, 10)
	e.Alert, e.Phase = beatAlert, Update
	return e
}

// envelope is an event as CloudEvents 1.0 in structured JSON (CNCF,
// CloudEvents specification 1.0.2 and its JSON format, 2022; from memory).
// exercise and delayed are extension attributes.
type envelope struct {
	SpecVersion string          `json:"specversion"`
	ID          string          `json:"id"`
	Source      string          `json:"source"`
	Type        string          `json:"type"`
	Subject     string          `json:"subject"`
	Time        string          `json:"time"`
	ContentType string          `json:"datacontenttype"`
	Exercise    bool            `json:"exercise"`
	Delayed     bool            `json:"delayed,omitempty"`
	Data        json.RawMessage `json:"data"`
}

// body is what is sent of an event, and its media type.
func (r *Receiver) body(e *Event, delayed bool) (b []byte, contentType string, err error) {
	if r.opts.Format == CAP && e.Alert != beatAlert {
		return e.Data, "application/cap+xml; charset=utf-8", nil
	}
	root := "/sockline/"
	if e.Exercise || r.opts.Drill {
		root = "/sockline-exercise/"
	}
	data := e.Data
	if delayed {
		data = marked(data)
	}
	b, err = json.Marshal(envelope{
		SpecVersion: "1.0", ID: e.ID, Source: root + r.opts.Airfield, Type: typeOf(e), Subject: e.Alert,
		Time: e.Time.Time().UTC().Format(time.RFC3339Nano), ContentType: "application/json",
		Exercise: e.Exercise || r.opts.Drill, Delayed: delayed, Data: data,
	})
	if err != nil {
		return nil, "", fmt.Errorf("put event %s into words: %w", e.ID, err)
	}
	return b, "application/cloudevents+json; charset=utf-8", nil
}

// marked is an object that says that it is told late.
func marked(object []byte) []byte {
	object = bytes.TrimSpace(object)
	if len(object) < 3 || object[len(object)-1] != '}' {
		return object // nothing to add to
	}
	return append(bytes.Clone(object[:len(object)-1]), `,"delayed":true}`...)
}

// Seal is what stands in HeaderSeal: the HMAC-SHA256 (RFC 2104) under the
// shared secret of the value of HeaderSent, a line feed and the body, in
// hexadecimal. A receiver compares it in constant time and refuses a time that
// is minutes off, since an old request may be played back.
func Seal(secret []byte, sent string, body []byte) string {
	m := hmac.New(sha256.New, secret)
	m.Write([]byte(sent))
	m.Write([]byte{'\n'})
	m.Write(body)
	return hex.EncodeToString(m.Sum(nil))
}

// verdict is what a try came to.
type verdict int

const (
	later     verdict = iota // an answer that asks for another try, or a connection that broke
	delivered                // 2xx
	refused                  // an answer that will not change: 3xx, 4xx but 408 and 429
	unreached                // no connection, or nobody who can be trusted
)

// answer is a verdict with its reason and how long the receiver asks to wait.
type answer struct {
	verdict verdict
	why     string
	wish    time.Duration
}

// post makes one try. It runs beside Run and touches nothing of its state.
func (r *Receiver) post(ctx context.Context, it *item, now time.Time) answer {
	delayed := now.Sub(it.at) > LateAfter
	body, contentType, err := r.body(&it.event, delayed)
	if err != nil {
		return answer{verdict: refused, why: err.Error()}
	}
	var connected atomic.Bool
	trace := &httptrace.ClientTrace{GotConn: func(httptrace.GotConnInfo) { connected.Store(true) }}
	q, err := http.NewRequestWithContext(httptrace.WithClientTrace(ctx, trace), http.MethodPost, r.opts.URL, bytes.NewReader(body))
	if err != nil {
		return answer{verdict: refused, why: err.Error()}
	}
	sent := now.UTC().Format(time.RFC3339)
	q.Header.Set("Content-Type", contentType)
	q.Header.Set("User-Agent", "sockline")
	q.Header.Set(HeaderSent, sent)
	q.Header.Set(HeaderEvent, it.event.ID)
	if delayed {
		q.Header.Set(HeaderDelayed, "true")
	}
	if len(r.opts.Secret) > 0 {
		q.Header.Set(HeaderSeal, Seal(r.opts.Secret, sent, body))
	}
	res, err := r.client.Do(q)
	if err != nil {
		a := answer{verdict: later, why: plain(err)}
		if !connected.Load() {
			a.verdict = unreached
		}
		return a
	}
	defer res.Body.Close()
	// What it says is not of interest, but a connection can only be used again
	// when it is read.
	_, _ = io.Copy(io.Discard, io.LimitReader(res.Body, 64<<10))
	return judge(res, now)
}

// plain is an error without the address, which may hold a token.
func plain(err error) string {
	var u *url.Error
	if errors.As(err, &u) {
		return u.Err.Error()
	}
	return err.Error()
}

// judge says what an answer means.
func judge(res *http.Response, now time.Time) answer {
	code := res.StatusCode
	why := "it answered " + strconv.Itoa(code) + " " + http.StatusText(code)
	switch {
	case code >= 200 && code < 300:
		return answer{verdict: delivered}
	case code == http.StatusRequestTimeout || code == http.StatusTooManyRequests || code >= 500:
		return answer{verdict: later, why: why, wish: wish(res.Header.Get("Retry-After"), now)}
	case code >= 300 && code < 400:
		return answer{verdict: refused, why: why + ": redirects are not followed: write the final address in the configuration"}
	}
	return answer{verdict: refused, why: why + ": what was sent is not sent again"}
}

// wish reads Retry-After (RFC 9110 section 10.2.3): seconds or a date. What
// cannot be read counts for nothing, and what is too long is cut.
func wish(text string, now time.Time) time.Duration {
	if text == "" {
		return 0
	}
	if s, err := strconv.ParseUint(text, 10, 32); err == nil {
		return min(time.Duration(s)*time.Second, longestWish)
	}
	t, err := http.ParseTime(text)
	if err != nil {
		return 0
	}
	return min(max(t.Sub(now), 0), longestWish)
}
