package mast

import (
	"bytes"
	"fmt"
	"math"
	"time"

	"sockline/sensors"
	"sockline/sensors/decode"
)

// maxLine is the longest line, in bytes. NMEA 0183 allows 82; some instruments
// write longer ones.
const maxLine = 1024

// splitter cuts a stream into lines.
type splitter struct {
	line    []byte
	discard bool // in a line that is too long
	tooLong uint64
}

// feed takes a piece of the stream and calls each with every line that ends in
// it; the line is good until each returns.
func (s *splitter) feed(b []byte, each func(line []byte)) {
	for len(b) > 0 {
		end := bytes.IndexAny(b, "\r\n")
		piece := b
		if end >= 0 {
			piece = b[:end]
		}
		switch {
		case s.discard:
		case len(s.line)+len(piece) > maxLine:
			s.discard = true
			s.tooLong++
		default:
			s.line = append(s.line, piece...)
		}
		if end < 0 {
			return
		}
		if line := bytes.TrimSpace(s.line); !s.discard && len(line) > 0 {
			each(line)
		}
		s.line, s.discard = s.line[:0], false
		b = b[end+1:]
	}
}

// Choose is a kind of sentence that winds are taken from.
type Choose string

// Automatic takes the kind that gives a wind first, and stays with it until
// none has come for a while: many instruments say the same wind in two ways.
const Automatic Choose = "auto"

// Kinds are the kinds of sentences that can be chosen.
func Kinds() []Choose { return []Choose{Automatic, "MWV", "MWD", "MDA", "XDR"} }

const (
	// forsake is how long the chosen kind must be missing until another one is
	// taken.
	forsake = 10 * time.Second
	// pairing is how far apart two sentences of XDR may come that make one wind.
	pairing = time.Second

	markAddress = "PSKLX" // of sockline's own sentence; see package decode
)

// taker makes readings of lines.
type taker struct {
	decoder  *decode.Decoder
	choose   Choose
	chosen   Choose // with Automatic
	seen     sensors.Instant
	half     []byte // a sentence of XDR that lacks its other half
	halfAt   sensors.Instant
	exercise bool
	scratch  []sensors.Reading
	message  []byte
}

func newTaker(station string, choose Choose) (*taker, error) {
	d, err := decode.New(sensors.Station{ID: station, Format: sensors.FormatNMEA0183, North: sensors.NorthTrue}, 0)
	if err != nil {
		return nil, fmt.Errorf("prepare to read sentences: %w", err)
	}
	return &taker{decoder: d, choose: choose}, nil
}

// take appends what a line that arrived at a stamp says. Directions are as the
// instrument counts them: from its own zero, or from true north where the
// sentence says so. One from magnetic north is refused, since nobody here
// knows the variation. The error is what was refused.
func (t *taker) take(dst []Record, line []byte, at sensors.Instant) ([]Record, error) {
	if len(line) > 6 && string(line[1:6]) == markAddress {
		// In a stream there is no message that it could belong to: it marks
		// what follows. Whatever is not plainly false does.
		t.exercise = !bytes.Equal(line, []byte("$PSKLX,0*40"))
		return dst, nil
	}
	kind := kindOf(line)
	if t.choose != Automatic && kind != "" && kind != t.choose {
		return dst, nil
	}
	if t.choose == Automatic && kind != "" && t.chosen != "" && kind != t.chosen && at.Sub(t.seen) < forsake {
		return dst, nil
	}
	t.message = t.message[:0]
	if kind == "XDR" && len(t.half) > 0 && at.Sub(t.halfAt) <= pairing {
		t.message = append(append(t.message, t.half...), '\n')
	}
	t.half = t.half[:0]
	t.message = append(t.message, line...)
	var err error
	t.scratch, err = t.decoder.Decode(t.scratch[:0], sensors.Message{Payload: t.message, Received: at}, math.NaN())
	if kind == "XDR" && len(t.scratch) == 0 && err != nil && len(t.message) == len(line) {
		t.half, t.halfAt, err = append(t.half, line...), at, nil
	}
	for _, r := range t.scratch {
		if kind != "" {
			t.chosen, t.seen = kind, at
		}
		dst = append(dst, Record{Time: at, Speed: r.Speed, From: r.From, Gust: r.Gust, HasGust: r.HasGust, Exercise: t.exercise})
	}
	return dst, err
}

// kindOf is the kind of a sentence that may hold a wind, empty for another.
func kindOf(line []byte) Choose {
	if len(line) < 6 || line[1] == 'P' {
		return ""
	}
	switch kind := Choose(line[3:6]); kind {
	case "MWV", "MWD", "MDA", "XDR":
		return kind
	}
	return ""
}
