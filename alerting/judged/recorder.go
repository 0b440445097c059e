package judged

import (
	"math"
	"slices"

	"sockline/alerting/hazard"
	"sockline/alerting/shear"
	"sockline/sensors"
)

// Recorder gathers steps into blocks. It waits for nothing: a block that is
// whole is handed to keep, which must not wait either.
type Recorder struct {
	context   *Context
	stretches int
	of        []int // by path: its stretch
	block     *block
	keep      func(*block)
}

// newRecorder begins with a context; keep gets every block that is whole.
func newRecorder(c Context, keep func(*block)) *Recorder {
	c.Without = true
	r := &Recorder{context: &c, keep: keep}
	r.stretches, r.of = c.stretches()
	return r
}

// Take adds the step t; looks are in the order of the context's paths. A block
// never holds steps of two days, nor of two contexts.
func (r *Recorder) Take(t sensors.Instant, looks []Look) {
	b := r.block
	const span = BlockSteps * sensors.Second
	if b != nil && (t/span != b.start/span || t <= b.last()) {
		r.Flush()
		b = nil
	}
	if b == nil {
		b = &block{context: r.context, start: t}
		r.block = b
	}
	g := groundOf(looks)
	n := len(b.grounds) - 1
	if n < 0 || !b.grounds[n].same(&g) {
		b.grounds = append(b.grounds, g)
		n++
	}
	row := row{offset: int((t - b.start) / sensors.Second), ground: n,
		sides: make([]side, r.context.sides()*r.stretches), places: make([]place, 2*len(looks))}
	for i, l := range looks {
		row.exercise = row.exercise || l.Found.Exercise
		if l.Stretch == nil {
			continue
		}
		if r.context.Owners[i] == i {
			s := row.sides[r.context.sides()*r.of[i]:]
			s[0].take(r.context.Thresholds, &l.Stretch.Loss)
			s[1].take(r.context.Thresholds, &l.Stretch.Gain)
			if l.Without != nil {
				s[2].take(r.context.Thresholds, &l.Without.Loss)
			}
		}
		row.places[2*i], row.places[2*i+1] = placeOf(&l.Found.Loss), placeOf(&l.Found.Gain)
		if s, ok := r.steepness(l); ok {
			s.row, s.path = len(b.rows), i
			b.steeps = append(b.steeps, s)
		}
	}
	b.rows = append(b.rows, row)
}

func placeOf(c *hazard.Change) place {
	return place{from: deci(c.From), to: deci(c.To), edge: c.AtEdge}
}

// steepness is what the F-factor adds to the loss; false if it adds nothing
// that could decide.
func (r *Recorder) steepness(l Look) (s steep, ok bool) {
	limit := l.Found.Loss.Kilometre
	if limit <= 0 || l.Stretch.EitherAtLeast(math.Inf(1), limit*hazard.HoldFBar) == 0 {
		return s, false
	}
	s.open = either(l.Stretch, r.context.Thresholds, limit)
	s.close = either(l.Stretch, r.context.Thresholds, limit*hazard.HoldFBar)
	// Where the loss alone says as much, nothing is to be added.
	alone := either(l.Stretch, r.context.Thresholds, math.Inf(1))
	return s, !slices.Equal(alone, s.open) || !slices.Equal(alone, s.close)
}

func either(s *shear.Stretch, thresholds []float64, kilometre float64) []uint8 {
	counts := make([]uint8, len(thresholds))
	for i, t := range thresholds {
		counts[i] = countOf(int(math.Round(s.EitherAtLeast(t, kilometre) * float64(len(s.Loss.Sorted)))))
	}
	return counts
}

// Flush ends the block at hand.
func (r *Recorder) Flush() {
	if r.block != nil && len(r.block.rows) > 0 {
		r.keep(r.block)
	}
	r.block = nil
}

// follow puts another context in force after the last step taken.
func (r *Recorder) follow(c Context) {
	r.Flush()
	keep := r.keep
	*r = *newRecorder(c, keep)
}

func (b *block) last() sensors.Instant {
	if len(b.rows) == 0 {
		return b.start - sensors.Second
	}
	return b.start + sensors.Instant(b.rows[len(b.rows)-1].offset)*sensors.Second
}
