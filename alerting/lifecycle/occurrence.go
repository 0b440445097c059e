package lifecycle

import (
	"fmt"
	"math"
	"time"

	"sockline/sensors"
)

const (
	// occurrenceWindow is how far apart the openings of two alerts of one
	// occurrence may lie.
	occurrenceWindow = 60 * time.Second
	// occurrenceReach is how near (m) the places of two alerts must come to
	// be one occurrence. Two paths along one centreline are compared where
	// they lie on the ground; crossing runways meet within this.
	occurrenceReach = 500
)

// idTime is how a time of opening is written in an id.
const idTime = "20060102T150405Z"

// place is the ground under an alert: a straight piece, metres east and north
// of the reference point.
type place struct{ x0, y0, x1, y1 float64 }

// opening is what is remembered of an alert that closed within the occurrence
// window: it may still be joined.
type opening struct {
	occurrence string
	opened     sensors.Instant
	place      place
}

// place is the ground between from and to (m before the threshold) of a path.
func (m *Machine) place(path int, from, to float64) place {
	p := &m.settings.Paths[path]
	sin, cos := math.Sincos(p.Bearing * (math.Pi / 180))
	return place{
		x0: p.East - float64(from*sin), y0: p.North - float64(from*cos),
		x1: p.East - float64(to*sin), y1: p.North - float64(to*cos),
	}
}

// occurrence is the id of the occurrence that an alert opening at T on this
// ground belongs to: that of the earliest alert it overlaps, or a new one.
func (m *Machine) occurrence(T sensors.Instant, at place) string {
	found, earliest := "", T
	consider := func(occurrence string, opened sensors.Instant, p place) {
		if T.Sub(opened) > occurrenceWindow || found != "" && opened >= earliest {
			return
		}
		if at.distance(p) <= occurrenceReach {
			found, earliest = occurrence, opened
		}
	}
	for i := range m.slots {
		if s := &m.slots[i]; s.open {
			consider(s.alert.Occurrence, s.alert.Opened, m.place(s.alert.Path, s.alert.From, s.alert.To))
		}
	}
	for _, o := range m.recent {
		consider(o.occurrence, o.opened, o.place)
	}
	if found != "" {
		return found
	}
	// Two unrelated occurrences may begin in the same second: the second one
	// must not be taken for the first.
	id := m.settings.Airfield + "-" + T.Time().Format(idTime)
	for n, base := 2, id; m.occurrenceKnown(id); n++ {
		id = fmt.Sprintf("%s-%d", base, n)
	}
	return id
}

func (m *Machine) occurrenceKnown(id string) bool {
	for i := range m.slots {
		if m.slots[i].open && m.slots[i].alert.Occurrence == id {
			return true
		}
	}
	for _, o := range m.recent {
		if o.occurrence == id {
			return true
		}
	}
	return false
}

// remember keeps what occurrence needs of an alert that closes at T, and
// forgets what is too old to be joined.
func (m *Machine) remember(T sensors.Instant, a *Alert) {
	kept := m.recent[:0]
	for _, o := range m.recent {
		if T.Sub(o.opened) <= occurrenceWindow {
			kept = append(kept, o)
		}
	}
	m.recent = kept
	if T.Sub(a.Opened) <= occurrenceWindow {
		m.recent = append(m.recent, opening{a.Occurrence, a.Opened, m.place(a.Path, a.From, a.To)})
	}
}

// distance is the least distance (m) between two pieces of ground; 0 where
// they cross.
func (p place) distance(q place) float64 {
	if p.crosses(q) {
		return 0
	}
	return min(
		p.from(q.x0, q.y0), p.from(q.x1, q.y1),
		q.from(p.x0, p.y0), q.from(p.x1, p.y1))
}

// crosses reports whether the two pieces properly cross: the ends of each lie
// on different sides of the other. Touching is left to the distances.
func (p place) crosses(q place) bool {
	return p.side(q.x0, q.y0)*p.side(q.x1, q.y1) < 0 && q.side(p.x0, p.y0)*q.side(p.x1, p.y1) < 0
}

// side is positive to the left of the piece, negative to the right.
func (p place) side(x, y float64) float64 {
	return float64((p.x1-p.x0)*(y-p.y0)) - float64((p.y1-p.y0)*(x-p.x0))
}

// from is the distance (m) of a point from the piece.
func (p place) from(x, y float64) float64 {
	dx, dy := p.x1-p.x0, p.y1-p.y0
	length2 := float64(dx*dx) + float64(dy*dy)
	along := 0.0
	if length2 > 0 {
		along = (float64((x-p.x0)*dx) + float64((y-p.y0)*dy)) / length2
		along = max(0, min(1, along))
	}
	return math.Hypot(x-p.x0-float64(along*dx), y-p.y0-float64(along*dy))
}
