package front

import (
	"math"
	"slices"

	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quantity"
)

// Bounds of the tracks.
const (
	mostTracks = 6
	trackEnds  = 900.0 // s after the last mast was reached a track is forgotten
	joinAngle  = 60.0  // degrees between its change and that of a track, at most
	joinWithin = 900.0 // s between a mast and the one before

	leastMasts = 2   // that a front must have reached
	confident  = 0.5 // below this it is not told ...
	surely     = 0.9 // ... and this is asked of a slow change, which eddies and outflows make, too
	priorFront = 0.2 // probability that two changes within ten minutes are one line
	// Changes so near in time (s) and so far from each other in direction
	// (degrees) are two sides of one outflow. In 200 episodes without a front 6
	// lines are told with 70 s and 5 with 120 s, and a minute ahead 320 and 310 of
	// 569 arrivals (seeds from 6,000,000 on).
	opposedTime  = 70.0
	opposedAngle = 110.0
	opposedPart  = 0.4 // of the change, that the other side must be at least

	edgeShare   = 0.5 // more, and it is the edge of an outflow
	edge        = 60  // s: a change that lasts no longer is an edge
	sharp       = 150 // s: a change that lasts longer is a slow shift, no gust front
	leastTurned = 1.5 // m/s of wind below which a direction is not turned
)

// track is a set of onsets that may be one front.
type track struct {
	hits          []onset // in the order in which they were found
	front         Front
	told          bool // front holds a result worth telling
	rests         bool // none of its onsets is fitted any more
	predicted     []prediction
	before, after quantity.Vector
	run           float64 // m beyond the middle of the masts that the line stood ...
	at            sensors.Instant
}

// prediction is what was said of a mast a minute ahead.
type prediction struct {
	said sensors.Instant // the latest that was said a minute or more ahead
	last sensors.Instant // At as of the last weighing
}

// Tracker follows the fronts over one airfield. Not safe for concurrent use.
type Tracker struct {
	masts   []Mast
	places  []Place
	clock   clockwork
	watches []watch
	bank    *bank
	middleX float64
	middleY float64
	live    []bool
	tracks  []track // in use, oldest first; the rest of its capacity is reused
	turn    *turning

	post    *posterior
	fit     fitter
	hits    []hit
	waiting []int
	passes  []Passage
	fronts  []Front
}

// New makes a tracker. The layout is that of the snapshots to come.
func New(masts []Mast, places []Place, layout averages.Layout) *Tracker {
	w := layout.Seconds[0]
	t := &Tracker{
		masts: masts, places: places,
		clock:   clockwork{w: w, width: sensors.Instant(w) * sensors.Second},
		watches: make([]watch, len(masts)), live: make([]bool, len(masts)),
		post: &posterior{flat: make([]float64, 0, 3*len(masts))}, turn: newTurning(),
		hits: make([]hit, 0, len(masts)), waiting: make([]int, 0, len(masts)), passes: make([]Passage, 0, len(masts)),
	}
	var x, y []float64
	for _, p := range places {
		x, y = append(x, p.X), append(y, p.Y)
	}
	for _, m := range masts {
		x, y = append(x, m.X), append(y, m.Y)
		t.middleX += m.X / float64(len(masts))
		t.middleY += m.Y / float64(len(masts))
	}
	t.bank = newBank(x, y, t.middleX, t.middleY)
	t.tracks = make([]track, mostTracks)
	for i := range t.tracks {
		t.tracks[i].hits = make([]onset, 0, len(masts))
		t.tracks[i].predicted = make([]prediction, len(masts))
		t.tracks[i].front.Hit = make([]int, 0, len(masts))
		t.tracks[i].front.Arrivals = make([]Arrival, 0, len(x))
	}
	t.tracks = t.tracks[:0]
	t.fronts = make([]Front, 0, mostTracks+1)
	return t
}

// Step takes a snapshot and gives the fronts that are known after it, those
// that came first first. They are overwritten by the next step.
func (t *Tracker) Step(s *averages.Snapshot) []Front {
	now := s.At()
	if now%t.clock.width == 0 {
		t.tick(s, now)
	}
	t.fronts = t.fronts[:0]
	for i := range t.tracks {
		if tr := &t.tracks[i]; tr.told {
			t.move(tr, now)
			t.fronts = append(t.fronts, tr.front)
		}
	}
	if f, ok := t.turn.now(t.fronts); ok {
		t.fronts = append(t.fronts, f)
	}
	return t.fronts
}

// tick takes the newest block of every mast and brings the tracks up to it.
func (t *Tracker) tick(s *averages.Snapshot, now sensors.Instant) {
	t.forget(now)
	for i := range t.masts {
		if t.masts[i].Aloft {
			continue
		}
		m := s.Mast(i)
		t.live[i] = m.State == averages.Live
		t.watches[i].take(t.clock, now, m)
	}
	t.turn.take(t, now)
	t.renew(now)
	found := false
	for i := range t.masts {
		w := &t.watches[i]
		if !t.live[i] {
			continue
		}
		if w.over != 0 && now.Sub(w.over).Seconds() > baseFrom+baseSpan+cusumSpan {
			w.over = 0
		}
		if began, ok := w.test(t.clock, now); ok {
			t.found(i, now, began)
			found = true
		}
	}
	if found {
		t.regroup()
	}
	for i := range t.tracks {
		t.weigh(&t.tracks[i], now)
	}
}

// forget ends the tracks whose last mast was reached long ago.
func (t *Tracker) forget(now sensors.Instant) {
	for i := 0; i < len(t.tracks); {
		tr := &t.tracks[i]
		last := sensors.Instant(0)
		for k := range tr.hits {
			last = max(last, tr.hits[k].alarm)
		}
		if now.Sub(last).Seconds() <= trackEnds {
			i++
			continue
		}
		t.drop(i)
	}
}

// drop takes a track out and keeps its memory behind the others for reuse.
func (t *Tracker) drop(i int) {
	old := t.tracks[i]
	copy(t.tracks[i:], t.tracks[i+1:])
	t.tracks[len(t.tracks)-1] = old
	t.tracks = t.tracks[:len(t.tracks)-1]
}

// renew fits the young onsets again, now that more of the change is known, and
// drops those that have come to nothing.
func (t *Tracker) renew(now sensors.Instant) {
	for i := 0; i < len(t.tracks); {
		tr := &t.tracks[i]
		for k := 0; k < len(tr.hits); {
			o := &tr.hits[k]
			if !o.settled {
				t.fit.settle(&t.watches[o.mast], t.clock, now, o, o.at-60, o.at+60)
				age := now.Sub(o.alarm).Seconds()
				o.settled = age > settles
				t.watches[o.mast].over = o.over()
				if change := o.change(); age > judged && change.Speed() < max(leastChange, leastRatio*o.noise) {
					tr.hits = slices.Delete(tr.hits, k, k+1)
					continue
				}
			}
			k++
		}
		if len(tr.hits) == 0 {
			t.drop(i)
			continue
		}
		i++
	}
}

// found makes an onset of the alarm at a mast and gives it to the track that it
// fits best, or to a new one.
func (t *Tracker) found(mast int, now sensors.Instant, began int) {
	w := &t.watches[mast]
	newest := &w.ticks[t.clock.slot(now)]
	o := onset{mast: mast, alarm: now, noise: newest.sd, after: newest.v, sd: float64(t.clock.w), since: w.over}
	o.at = -float64((began + 1) * t.clock.w) // the tick after the last zero
	if base, _, ok := w.base(t.clock, now); ok {
		o.before = base
	}
	t.fit.settle(w, t.clock, now, &o, o.at-40, 0)
	w.over = max(o.over(), now)
	best := t.nearest(&o)
	if best == nowhere {
		best = t.begin(now)
	}
	tr := &t.tracks[best]
	tr.hits = append(tr.hits, o)
}

// angle between two winds, degrees; 0 where one of them is nil.
func angle(a, b quantity.Vector) float64 {
	size := a.Speed() * b.Speed()
	if size == 0 {
		return 0
	}
	cos := (float64(a.East*b.East) + float64(a.North*b.North)) / size
	return math.Acos(min(max(cos, -1), 1)) * (180 / math.Pi)
}

// Follow is the tracker to go on with when t, which has seen nothing, is to
// take the place of before: before itself where the masts, the places and the
// blocks are the same; as says for each mast of t which mast of before it is.
// Otherwise a front that passes is found anew within minutes.
func (t *Tracker) Follow(before *Tracker, as []int) *Tracker {
	same := slices.Equal(t.masts, before.masts) && slices.Equal(t.places, before.places) && t.clock == before.clock
	for i, j := range as {
		same = same && i == j
	}
	if same {
		return before
	}
	return t
}
