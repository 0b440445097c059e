package front

import (
	"math"
	"slices"
	"time"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// weigh works out what the onsets of a track make of its front.
func (t *Tracker) weigh(tr *track, now sensors.Instant) {
	t.gather(tr)
	f := &tr.front
	f.Before, f.After = tr.before, tr.after
	f.Change = quantity.Vector{East: tr.after.East - tr.before.East, North: tr.after.North - tr.before.North}
	f.Turn = Turned(tr.before, tr.after)
	f.Lasts = 0
	for k := range tr.hits {
		f.Lasts += tr.hits[k].lasts / float64(len(tr.hits))
	}
	if f.Kind = GustFront; f.Lasts > sharp {
		f.Kind = WindShift
	}
	if tr.told && tr.rests && len(t.waiting) == 0 {
		return // all has been seen: nothing would change
	}
	before := tr.told
	tr.told = false
	if len(tr.hits) < leastMasts || f.Change.Speed() < leastChange {
		return
	}
	plane, solved := Fit(t.passes)
	if solved && plane.scattered() || t.opposed(tr) {
		return // whatever the lines say, which takes long to find out
	}
	p := t.post
	p.weigh(t.bank, t.hits, t.waiting, tr.after, f.Change, now.Sub(f.First).Seconds())
	odds := p.odds + math.Log(priorFront/(1-priorFront))
	f.Confidence = 1 / (1 + math.Exp(-odds))
	f.Aligned, f.Apparent = plane.aligned(), 0
	if f.Aligned {
		if slow := math.Abs(plane.apparent(t.passes)); slow > 1/(10*fastest) {
			f.Apparent = 1 / slow
		}
	}
	// From an edge to a slow change it is asked of more and more.
	least := confident + float64((surely-confident)*min(max((f.Lasts-edge)/(sharp-edge), 0), 1))
	if before {
		least /= 2 // what has been told is not taken back for little
	}
	if p.outflow > edgeShare || f.Confidence < least {
		return
	}
	tr.told = true
	f.Moving = true
	f.Toward, f.TowardSD, f.Speed, f.SpeedLow, f.SpeedHigh = p.motion(t.bank)
	run, spread := p.run(t.bank, f.Toward, now.Sub(f.First).Seconds())
	tr.run, tr.at, f.Band = run, now, ninety*spread
	t.arrive(tr, now)
}

// opposed tells whether half of the masts of a track, or more, changed at the
// time at which another mast changed the other way: air that flows apart is no
// front. Where the front has gone by already, the wind behind it falling back is
// no sign of that, nor is a gust of a fraction of its change anywhere.
func (t *Tracker) opposed(tr *track) bool {
	count := 0
	for k := range tr.hits {
		for i := range t.tracks {
			if other := &t.tracks[i]; other != tr && other.against(&tr.hits[k], tr) {
				count++
				break
			}
		}
	}
	return 2*count >= len(tr.hits)
}

// against tells whether a track holds a change opposite to one of by at another
// mast, at about its time, that did not come behind by itself.
func (tr *track) against(o *onset, by *track) bool {
	for k := range tr.hits {
		h := &tr.hits[k]
		if h.mast != o.mast && math.Abs(h.from(o.alarm)-o.at) < opposedTime && angle(h.change(), o.change()) > opposedAngle && !by.passed(h) {
			if there, here := h.change(), o.change(); there.Speed() >= opposedPart*here.Speed() {
				return true
			}
		}
	}
	return false
}

// passed tells whether a track reached the mast of a slow change before it.
func (tr *track) passed(h *onset) bool {
	for k := range tr.hits {
		if o := &tr.hits[k]; o.mast == h.mast {
			return h.lasts > sharp/2 && o.from(h.alarm) < h.at
		}
	}
	return false
}

// gather fills the scratch: masts reached, masts waiting, and the mean winds
// before and behind.
func (t *Tracker) gather(tr *track) {
	t.hits, t.waiting, t.passes = t.hits[:0], t.waiting[:0], t.passes[:0]
	tr.front.Hit = tr.front.Hit[:0]
	tr.before, tr.after = quantity.Vector{}, quantity.Vector{}
	n := float64(len(tr.hits))
	tr.rests = true
	for k := range tr.hits {
		o := &tr.hits[k]
		tr.rests = tr.rests && o.settled
		at, c := o.from(tr.front.First), o.change()
		if size := c.Speed(); size > 0 {
			c = scaled(c, 1/size)
		}
		t.hits = append(t.hits, hit{place: len(t.places) + o.mast, t: at, sd: o.sd, change: c})
		m := t.masts[o.mast]
		t.passes = append(t.passes, Passage{X: m.X, Y: m.Y, T: at, SD: math.Hypot(o.sd, lineRough)})
		tr.front.Hit = append(tr.front.Hit, o.mast)
		tr.before.East += o.before.East / n
		tr.before.North += o.before.North / n
		tr.after.East += o.after.East / n
		tr.after.North += o.after.North / n
	}
	slices.Sort(tr.front.Hit)
	for i := range t.masts {
		if t.live[i] && !t.masts[i].Aloft && !slices.Contains(tr.front.Hit, i) {
			t.waiting = append(t.waiting, len(t.places)+i)
		}
	}
}

// arrive fills the arrivals: what was seen at the masts that have been reached,
// and what the lines say of all other places.
func (t *Tracker) arrive(tr *track, now sensors.Instant) {
	f := &tr.front
	f.Arrivals = f.Arrivals[:0]
	for i := range t.bank.places {
		a := Arrival{Mast: i - len(t.places)}
		if a.Mast < 0 {
			a.Mast, a.Place, a.X, a.Y = -1, t.places[i].Name, t.places[i].X, t.places[i].Y
		} else {
			m := t.masts[a.Mast]
			a.Place, a.X, a.Y = m.ID, m.X, m.Y
		}
		at, sd := t.post.arrival(t.bank, i)
		if k := slices.IndexFunc(tr.hits, func(o onset) bool { return o.mast == a.Mast }); k >= 0 {
			at, sd = tr.hits[k].from(f.First), tr.hits[k].sd
			a.Arrived = true
		}
		a.At = after(f.First, at)
		a.Earliest, a.Latest = after(f.First, at-float64(ninety*sd)), after(f.First, at+float64(ninety*sd))
		a.Arrived = a.Arrived || a.Mast < 0 && a.At <= now
		if a.Mast >= 0 {
			a.Predicted = tr.predicted[a.Mast].take(&a, now)
		}
		f.Arrivals = append(f.Arrivals, a)
	}
}

// ahead is how long before its arrival at a mast a prediction must have been
// made to be kept beside what was seen.
const ahead = time.Minute

// take notes what is said of a mast now, and gives what was last said a minute
// or more ahead.
func (p *prediction) take(a *Arrival, now sensors.Instant) sensors.Instant {
	if !a.Arrived {
		if a.At.Sub(now) >= ahead {
			p.said = a.At
		}
		p.last = a.At
	}
	return p.said
}

// after is the whole second nearest to so many seconds after an instant.
func after(t sensors.Instant, s float64) sensors.Instant {
	return t + sensors.Instant(math.Round(s))*sensors.Second
}

// move brings the place of the line up to now, between two weighings too.
func (t *Tracker) move(tr *track, now sensors.Instant) {
	f := &tr.front
	for i := range f.Arrivals {
		a := &f.Arrivals[i]
		a.Arrived = a.Arrived || a.Mast < 0 && a.At <= now
	}
	sin, cos := sincos(f.Toward)
	run := tr.run + float64(f.Speed*now.Sub(tr.at).Seconds())
	f.X, f.Y = t.middleX+float64(run*sin), t.middleY+float64(run*cos)
}

// Turned is how far a wind turns from before to after, degrees, clockwise
// positive, in [-180, 180); 0 where either is too light for a direction.
func Turned(before, after quantity.Vector) float64 {
	if before.Speed() < leastTurned || after.Speed() < leastTurned {
		return 0
	}
	return quantity.NormalizeDegrees(after.From()-before.From()+180) - 180
}
