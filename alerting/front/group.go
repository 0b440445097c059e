package front

import (
	"math"
	"slices"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// Which changes belong to one front is decided by how much likelier their
// times and directions are under one line than by chance: what a change adds to
// that, its gain, in natural logarithms.
const (
	// leastGain is what a change must add to a track to be given to it rather
	// than to begin one of its own.
	leastGain = -1.0
	// moveGain is how much more a change must add elsewhere to be moved there.
	moveGain = 1.5
	// A change that adds more than settledGain to its track stays there: to weigh
	// it elsewhere takes a millisecond each time.
	settledGain = 2.0
	// mostMoves bounds how many changes are moved in one step.
	mostMoves = 2
	// nowhere is where a change is left out of all tracks.
	nowhere = -1
)

// evidence is how much likelier the changes of a track are under one line than
// by chance (logarithm), without the one with the index less (nowhere: none) and
// with more, if that is not nil.
func (t *Tracker) evidence(tr *track, less int, more *onset) float64 {
	t.hits = t.hits[:0]
	var before, after quantity.Vector
	add := func(o *onset) {
		c := o.change()
		if size := c.Speed(); size > 0 {
			c = scaled(c, 1/size)
		}
		t.hits = append(t.hits, hit{place: len(t.places) + o.mast, t: o.from(tr.front.First), sd: o.sd, change: c})
		before = quantity.Vector{East: before.East + o.before.East, North: before.North + o.before.North}
		after = quantity.Vector{East: after.East + o.after.East, North: after.North + o.after.North}
	}
	for k := range tr.hits {
		if k != less {
			add(&tr.hits[k])
		}
	}
	if more != nil {
		add(more)
	}
	if len(t.hits) < 2 {
		return 0
	}
	n := float64(len(t.hits))
	before, after = scaled(before, 1/n), scaled(after, 1/n)
	change := quantity.Vector{East: after.East - before.East, North: after.North - before.North}
	t.post.weigh(t.bank, t.hits, nil, after, change, 0)
	return t.post.odds
}

// gain is what a change of a mast adds to a track, whose evidence is whole; no
// where it cannot belong to it.
func (t *Tracker) gain(tr *track, whole float64, o *onset) (gain float64, ok bool) {
	near := false
	var sum quantity.Vector
	for k := range tr.hits {
		h := &tr.hits[k]
		if h.mast == o.mast {
			return 0, false
		}
		near = near || math.Abs(o.alarm.Sub(h.alarm).Seconds()) <= joinWithin
		c := h.change()
		sum.East, sum.North = sum.East+c.East, sum.North+c.North
	}
	if !near || angle(sum, o.change()) > joinAngle {
		return 0, false
	}
	return t.evidence(tr, nowhere, o) - whole, true
}

// regroup moves changes to where they are likelier: a front that is followed
// by another, and a mast that chance has set off, are told apart only once more
// masts have been reached.
func (t *Tracker) regroup() {
	for range mostMoves {
		from, hit, to := t.bestMove()
		if from < 0 {
			return
		}
		o := t.tracks[from].hits[hit]
		t.tracks[from].hits = slices.Delete(t.tracks[from].hits, hit, hit+1)
		if to == nowhere {
			to = t.begin(o.alarm)
		}
		t.tracks[to].hits = append(t.tracks[to].hits, o)
		if len(t.tracks[from].hits) == 0 {
			t.drop(from)
		}
	}
}

// bestMove finds the change that gains most by a move: its track, its index
// there, and the track to move it to, or nowhere for one of its own. from is
// negative when none is worth it.
func (t *Tracker) bestMove() (from, hit, to int) {
	from, best := -1, moveGain
	var whole [mostTracks]float64
	for i := range t.tracks {
		whole[i] = t.evidence(&t.tracks[i], nowhere, nil)
	}
	for i := range t.tracks {
		tr := &t.tracks[i]
		for k := range tr.hits {
			o := &tr.hits[k]
			own := whole[i] - t.evidence(tr, k, nil)
			if own > settledGain {
				continue
			}
			if alone := -own; len(tr.hits) > 2 && len(t.tracks) < mostTracks && alone > best {
				best, from, hit, to = alone, i, k, nowhere
			}
			for j := range t.tracks {
				if j == i {
					continue
				}
				if gain, ok := t.gain(&t.tracks[j], whole[j], o); ok && gain-own > best {
					best, from, hit, to = gain-own, i, k, j
				}
			}
		}
	}
	return from, hit, to
}

// nearest is the track to which a change adds most; nowhere for one of its own.
func (t *Tracker) nearest(o *onset) int {
	best, most := nowhere, leastGain
	for i := range t.tracks {
		tr := &t.tracks[i]
		if gain, ok := t.gain(tr, t.evidence(tr, nowhere, nil), o); ok && gain > most {
			best, most = i, gain
		}
	}
	return best
}

// begin opens a track whose first change was found at a time; the oldest makes
// room where there are too many.
func (t *Tracker) begin(at sensors.Instant) int {
	if len(t.tracks) == mostTracks {
		t.drop(0)
	}
	t.tracks = t.tracks[:len(t.tracks)+1]
	tr := &t.tracks[len(t.tracks)-1]
	hits, predicted, hit, arrivals := tr.hits[:0], tr.predicted, tr.front.Hit[:0], tr.front.Arrivals[:0]
	clear(predicted)
	*tr = track{hits: hits, predicted: predicted}
	// It names the front, so no two tracks may share it.
	for slices.ContainsFunc(t.tracks[:len(t.tracks)-1], func(o track) bool { return o.front.First == at }) {
		at++
	}
	tr.front = Front{Kind: GustFront, First: at, Hit: hit, Arrivals: arrivals}
	return len(t.tracks) - 1
}
