// Package judged keeps, for every step and path, how likely each size of loss
// and gain was: the measured stretches and their assessments come in, one
// compact file a UTC day goes to disk, and the same steps come out again to be
// judged by other levels. That answers "what if the level had been 12 kt" for
// a year without a single step of the analysis.
//
// What is kept can be made again from the readings, so nothing waits for it
// and nothing is lost with it but time. The file is described in format.md.
// Next: review.
package judged

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"

	"sockline/alerting/airfield"
	"sockline/alerting/hazard"
	"sockline/alerting/lifecycle"
	"sockline/alerting/shear"
	"sockline/alerting/windfield"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

const (
	// BlockSteps is how many steps stand in a block: ten minutes.
	BlockSteps = 600
	// firstKnot and lastKnot bound the whole knots at which the probability is
	// kept. No level lies below 5 kt with any sense, and 60 kt is beyond the
	// largest change that has been measured in an outflow.
	firstKnot, lastKnot = 5, 60
	// leastCount is the least count of draws that is kept: confidence is
	// configured at 0.5 or more, so that what is less likely decides nothing.
	leastCount = windfield.Draws / 2
	// tenth is the unit of the kept points of M, m/s.
	tenth = quantity.Knot / 10
	// sameLevel (m/s): levels that differ by less are one.
	sameLevel = 1e-9
)

// shares are the points of M that are kept: its 5, 20, 50, 80 and 95 %.
func shares() [points]float64 { return [points]float64{0.05, 0.2, 0.5, 0.8, 0.95} }

const points = 5

// Context is what the steps of a block were judged by, and what their numbers
// count.
type Context struct {
	Config     string               `json:"config"`   // SHA-256 of the configuration's text, hexadecimal
	Software   string               `json:"software"` // version of the program
	Paths      []lifecycle.PathName `json:"paths"`
	Stations   []string             `json:"stations"`
	Owners     []int                `json:"owners"`        // for each path, the first one that looks at the same ground
	Thresholds []float64            `json:"thresholds_ms"` // changes at which the probability is kept, m/s, ascending
	// Without: the loss without the mast that stands alone is kept, too. A Writer
	// sees to that; what version 1 wrote is without it.
	Without bool `json:"without"`
}

// Thresholds are the whole knots from 5 to 60 and the levels in force with
// their hysteresis, which may lie between.
func Thresholds(l hazard.Levels) []float64 {
	var all []float64
	for kt := firstKnot; kt <= lastKnot; kt++ {
		all = append(all, float64(kt)*quantity.Knot)
	}
	// Margin and large beside Beyond: other levels may not be issued as one.
	for _, level := range []float64{l.Noticeable, l.Large, l.Margin, l.Beyond()} {
		for _, v := range []float64{level, level - l.Hysteresis} {
			near := func(t float64) bool { return math.Abs(t-v) < sameLevel }
			if v > 0 && !slices.ContainsFunc(all, near) {
				all = append(all, v)
			}
		}
	}
	slices.Sort(all)
	return all
}

func (c Context) encode() ([]byte, error) {
	b, err := json.Marshal(c)
	if err != nil {
		return nil, fmt.Errorf("write down what the steps are judged by: %w", err)
	}
	return b, nil
}

// Look is what one step found on one path.
type Look struct {
	Stretch *shear.Stretch // nil while the path is not usable; valid during the call only
	// Without is the same ground without the mast that stands alone; nil where no
	// levels need it.
	Without *shear.Stretch
	Found   *hazard.Assessment
}

// side is the distribution of M on one side of a stretch at one step.
type side struct {
	state  uint8          // notSeen, low, full
	points [points]uint16 // of M, in tenths of a knot
	counts []uint8        // draws that reach each threshold; below leastCount as one less
}

const (
	notSeen uint8 = iota // nothing was measured
	low                  // even the 95 % point lies below every threshold
	full
)

// place is where the change of one path and side lies, in decimetres before
// the threshold.
type place struct {
	from, to int32
	edge     bool
}

// steep is a step and path at which the F-factor may have reached its margin:
// the draws that reach each threshold or are that steep, for opening and for
// holding.
type steep struct {
	row, path   int
	open, close []uint8
}

// ground is what could be observed, by path.
type ground struct {
	paths []pathGround
	used  []int
}

type pathGround struct {
	observed [][2]int32 // decimetres
	complete bool
	missing  []int
}

func groundOf(looks []Look) ground {
	g := ground{paths: make([]pathGround, len(looks))}
	for i, l := range looks {
		p := &g.paths[i]
		p.complete, p.missing = l.Found.Complete, slices.Clone(l.Found.Missing)
		for _, o := range l.Found.Observed {
			p.observed = append(p.observed, [2]int32{deci(o.From), deci(o.To)})
		}
		if len(l.Found.Observed) > 0 {
			g.used = append(g.used[:0], l.Found.Loss.Used...)
		}
	}
	return g
}

func (g *ground) same(o *ground) bool {
	return slices.Equal(g.used, o.used) && slices.EqualFunc(g.paths, o.paths, func(a, b pathGround) bool {
		return a.complete == b.complete && slices.Equal(a.missing, b.missing) && slices.Equal(a.observed, b.observed)
	})
}

func deci(m float64) int32 { return int32(math.Round(m * 10)) }

// block is up to BlockSteps steps in their order.
type block struct {
	context *Context
	start   sensors.Instant
	rows    []row
	grounds []ground
	steeps  []steep
}

// row is one step.
type row struct {
	offset   int // seconds since the start of the block
	ground   int
	exercise bool
	sides    []side  // by stretch (in the order of their owners): loss, gain, loss without the mast that stands alone
	places   []place // by path, loss before gain
}

// sides is how many sides of each stretch are kept: see row.
func (c *Context) sides() int {
	if c.Without {
		return 3
	}
	return 2
}

// stretches counts the different grounds of a context and gives each path the
// index of its own.
func (c *Context) stretches() (count int, of []int) {
	of = make([]int, len(c.Owners))
	for i, owner := range c.Owners {
		if owner == i {
			of[i] = count
			count++
		} else {
			of[i] = of[owner]
		}
	}
	return count, of
}

// take measures a side of a stretch into s.
func (s *side) take(thresholds []float64, m *shear.Side) {
	top := m.Quantile(0.95)
	if top < thresholds[0] {
		*s = side{state: low, counts: s.counts[:0]}
		return
	}
	s.state = full
	for i, p := range shares() {
		s.points[i] = uint16(math.Round(min(m.Quantile(p)/tenth, math.MaxUint16)))
	}
	s.counts = s.counts[:0]
	below := 0 // draws that do not reach the threshold
	for _, t := range thresholds {
		for below < len(m.Sorted) && m.Sorted[below] < t {
			below++
		}
		s.counts = append(s.counts, countOf(len(m.Sorted)-below))
	}
}

// countOf is a count as it is kept.
func countOf(n int) uint8 { return uint8(max(n, leastCount-1)) }

// interval gives an observed interval back, in m.
func interval(o [2]int32) airfield.Interval {
	return airfield.Interval{From: float64(o[0]) / 10, To: float64(o[1]) / 10}
}
