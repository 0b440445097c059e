package history

import (
	"bytes"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"time"

	"sockline/sensors"
)

// What a hold keeps beyond its period: to judge a second again, a replay needs
// the two hours before it; the archive of an event ends ten minutes after it.
const (
	heldBefore = 2*time.Hour + 10*time.Minute
	heldAfter  = 10 * time.Minute
)

// period is a stretch of time, both ends included.
type period struct{ from, to sensors.Instant }

// Holds are the periods whose readings must not be deleted.
type Holds struct {
	spans []period
	doubt string // why there may be more of them; nothing may be deleted then
}

// Cover reports whether a hold keeps something of [from, to).
func (h Holds) Cover(from, to sensors.Instant) bool {
	if h.doubt != "" {
		return true
	}
	for _, s := range h.spans {
		if s.from < to && s.to >= from {
			return true
		}
	}
	return false
}

// CoverDay is Cover for a UTC day, 2006-01-02.
func (h Holds) CoverDay(day string) bool {
	begin, err := time.Parse(dayLayoutGo, day)
	return err != nil || h.Cover(sensors.At(begin), sensors.At(begin.AddDate(0, 0, 1)))
}

// Doubt says why holds may be unknown; empty if all are known. Until it is
// settled everything counts as held.
func (h Holds) Doubt() string { return h.doubt }

// Holds reads every hold that has not been released. now ends those round
// events that are still open.
func (s *Store) Holds(now sensors.Instant) (Holds, error) {
	var out Holds
	aside, err := filepath.Glob(filepath.Join(s.dir, journalName+".damaged-*"))
	if err != nil {
		return out, fmt.Errorf("look for journals set aside: %w", err)
	}
	if len(aside) > 0 {
		out.doubt = fmt.Sprintf("%s was set aside as damaged and may hold back readings: settle what it held, then move it to another directory", filepath.Base(aside[0]))
	}
	held := map[string]Hold{}
	var before head
	err = s.withJournal(func(j *file) error {
		return walk(j, 0, func(key, value []byte) error {
			r, err := parseRecord(key, value)
			switch {
			case err != nil || r.Seq != before.seq+1:
				out.doubtful(before.seq + 1)
			case !r.follows(before.hash) && (r.Kind == KindHold || bytes.Contains(r.Payload, []byte(`"released"`))):
				out.doubtful(r.Seq) // it is, or was, a hold
			case r.Kind == KindHold:
				h, err := r.Hold()
				if err != nil {
					out.doubtful(r.Seq)
				} else if held[h.ID] = h; h.Released {
					delete(held, h.ID)
				}
			}
			if len(key) == 8 {
				before = head{seq: r.Seq, hash: r.Hash}
			}
			return nil
		})
	})
	if err != nil {
		return out, fmt.Errorf("read the holds: %w", err)
	}
	for id, h := range held {
		if err := out.add(s, h, now); err != nil {
			out.doubt = fmt.Sprintf("hold %s: %v: release it, or give it a period", id, err)
		}
	}
	return out, nil
}

func (h *Holds) doubtful(seq uint64) {
	h.doubt = fmt.Sprintf("record %d of the journal is damaged or missing and may be a hold: restore %s from a backup", seq, journalName)
}

// add takes in the period of a hold, and that of its event.
func (h *Holds) add(s *Store, held Hold, now sensors.Instant) error {
	if held.To != 0 {
		h.spans = append(h.spans, period{held.From.Add(-heldBefore), held.To.Add(heldAfter)})
	}
	if held.Event == "" {
		if held.To == 0 {
			return errors.New("it has neither a period nor an event")
		}
		return nil
	}
	e, err := s.Event(held.Event)
	if err != nil {
		return err
	}
	end := e.Closed
	if end == 0 {
		end = now
	}
	h.spans = append(h.spans, period{e.Opened.Add(-heldBefore), end.Add(heldAfter)})
	return nil
}

// Retain sets how long readings are kept from now on, as Options.Keep does.
func (s *Store) Retain(keep time.Duration) { s.keep.Store(int64(keep)) }

// Prune deletes the readings of days that ended before now - Keep, and what
// was set aside of such days, but for what a hold covers. It returns the names
// of the deleted files. While holds may be unknown nothing is deleted, and the
// error says why.
func (s *Store) Prune(now sensors.Instant) ([]string, error) {
	keep := time.Duration(s.keep.Load())
	if keep <= 0 || s.readOnly {
		return nil, nil
	}
	old, err := s.older(now.Add(-keep))
	if err != nil || len(old) == 0 {
		return nil, err
	}
	s.retention.Lock() // a hold that is told as recorded finds its readings
	defer s.retention.Unlock()
	holds, err := s.Holds(now)
	if err == nil && holds.doubt != "" {
		err = errors.New(holds.doubt)
	}
	if err != nil {
		err = fmt.Errorf("old readings are not deleted: %w", err)
		s.setHealth(func(h *Health) { h.KeptBack = err.Error() })
		return nil, err
	}
	s.setHealth(func(h *Health) { h.KeptBack = "" })
	var gone []string
	for _, o := range old {
		if holds.Cover(o.from, o.to) || s.shelf.inUse(o.name) {
			continue
		}
		if err := os.Remove(filepath.Join(s.dir, o.name)); err != nil {
			return gone, fmt.Errorf("delete old readings: %w", err)
		}
		gone = append(gone, o.name)
	}
	if len(gone) == 0 {
		return nil, nil
	}
	return gone, syncDir(s.dir)
}

// oldFile is a file of a day, [from, to).
type oldFile struct {
	name string
	period
}

// older lists the files of days that ended by the limit.
func (s *Store) older(limit sensors.Instant) ([]oldFile, error) {
	entries, err := os.ReadDir(s.dir)
	if err != nil {
		return nil, fmt.Errorf("list the history: %w", err)
	}
	var old []oldFile
	for _, e := range entries {
		rest, ok := strings.CutPrefix(e.Name(), dayPrefix)
		if !ok || len(rest) < len(dayLayoutGo) {
			continue
		}
		day, err := time.Parse(dayLayoutGo, rest[:len(dayLayoutGo)])
		if err != nil {
			continue
		}
		if o := (oldFile{e.Name(), period{sensors.At(day), sensors.At(day.AddDate(0, 0, 1))}}); o.to <= limit {
			old = append(old, o)
		}
	}
	return old, nil
}
