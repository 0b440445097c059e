// Package shear turns the posterior of the wind field into the headwind along
// a stretch of path: the profile, and the distribution of M, the greatest loss
// (or gain) of headwind between two observed points at most 4 km apart. Next:
// hazard.
//
// A maximum over pairs is biased if one pair is picked first, so M is taken in
// every joint draw, and its distribution is that of the draws.
package shear

import (
	"math"
	"slices"

	"sockline/alerting/windfield"
)

// Spacing between the points of a profile, m.
const Spacing = 200.0

const (
	// reachPoints: pairs are at most 4 km apart.
	reachPoints = int(4000 / Spacing)
	// kilometrePoints: the F-factor is averaged over 1 km.
	kilometrePoints = int(1000 / Spacing)
	// slopeLength is 1000 ft, over which the greatest slope is stated, m.
	slopeLength = 304.8
	// atOnce is how many draws are measured at a time where the processor can.
	atOnce = 4
	// tie: pairs of the mean profile whose changes differ by less are equal:
	// 0.05 kt in m/s.
	tie = 0.05 * 1852.0 / 3600.0
)

// Side is the greatest loss, or the greatest gain, along a stretch. Speeds are
// magnitudes in m/s.
type Side struct {
	Sorted []float64 // M of every draw, ascending
	sign   float64   // 1: a fall of the headwind, -1: a rise
	joint  []float64 // M of every draw, in the order of the draws
	kinds  *[windfield.Draws]windfield.PatternKind
}

// Kinds counts the draws whose M is at least change (m/s) by what lies over
// the ambient field in them.
func (s *Side) Kinds(change float64) (n [4]int) {
	if s.kinds == nil {
		return n
	}
	for d, m := range s.joint {
		if m >= change {
			n[s.kinds[d]]++
		}
	}
	return n
}

// Place is where the mean profile changes most.
type Place struct {
	Enter, End int     // points of the stretch, in its own order
	Change     float64 // of the mean profile between them, m/s, not negative
	MaxSlope   float64 // greatest change over 1000 ft between them, 1/s
}

// Quantile of M, by linear interpolation between the draws.
func (s *Side) Quantile(p float64) float64 { return Quantile(s.Sorted, p) }

// AtLeast is P(M >= change).
func (s *Side) AtLeast(change float64) float64 { return share(s.Sorted, change) }

// Stretch is a line of points in the order of one flight and what was found on
// it. Reversing the flight leaves loss and gain what they are (the headwind
// changes its sign and the order), so the two directions share it.
type Stretch struct {
	Points   []int  // targets of the wind field, in the order of flight
	Observed []bool // of each point

	Loss, Gain Side
	Mean       []float64 // headwind of the mean profile at each point, m/s, in this flight's direction

	kilometreSorted []float64 // greatest loss over 1 km of every draw, ascending

	// jointKilometre holds, for each draw in its own order, the greatest loss
	// over 1 km: P(either) needs that and M.
	jointKilometre []float64

	line []float64 // one draw
	// What follows from Observed; lookUp fills it.
	runs []run
	far  []int // the points with another reachPoints before them, both observed ...
	km   []int // ... and those with one kilometrePoints before them
	// first is the target of the first point where the points are targets in a
	// row, -1 where they are not.
	first  int
	turns  []turn
	space  []float64 // scratch of measureFast
	sorter sorter
}

// NewStretch prepares a stretch over targets in the order of flight.
func NewStretch(points []int) *Stretch {
	n := len(points)
	draws := func() []float64 { return make([]float64, windfield.Draws) }
	s := &Stretch{Points: points, Observed: make([]bool, n), Mean: make([]float64, n)}
	s.Loss = Side{Sorted: draws(), sign: 1, joint: draws()}
	s.Gain = Side{Sorted: draws(), sign: -1, joint: draws()}
	s.kilometreSorted, s.jointKilometre = draws(), draws()
	s.line = make([]float64, n)
	s.runs, s.far, s.km = make([]run, 0, n), make([]int, 0, n), make([]int, 0, n)
	s.turns = make([]turn, n)
	s.space = make([]float64, atOnce*(n+2*reachPoints))
	s.first = inARow(points)
	return s
}

// Measure finds loss and gain on the observed points. At least two must be
// observed.
func (s *Stretch) Measure(p *windfield.Posterior) {
	nt := len(p.Mean)
	s.lookUp()
	if !s.measureFast(p.Draws, nt) {
		s.measureEach(p.Draws, nt)
	}
	copy(s.Loss.Sorted, s.Loss.joint)
	copy(s.Gain.Sorted, s.Gain.joint)
	copy(s.kilometreSorted, s.jointKilometre)
	s.Loss.kinds, s.Gain.kinds = &p.Kinds, &p.Kinds
	s.sorter.sort(s.Loss.Sorted)
	s.sorter.sort(s.Gain.Sorted)
	s.sorter.sort(s.kilometreSorted)
	for i, t := range s.Points {
		s.Mean[i] = p.Mean[t]
	}
}

// measureEach fills what every draw holds, one after the other. The bits are those
// of measureFast.
func (s *Stretch) measureEach(draws []float64, targets int) {
	for d := range windfield.Draws {
		line := s.along(draws[d*targets : (d+1)*targets])
		s.Loss.joint[d], s.Gain.joint[d] = s.extremes(line)
		s.jointKilometre[d] = s.kilometre(line)
	}
}

// along is the points of the stretch out of a row of all targets.
func (s *Stretch) along(row []float64) []float64 {
	if s.first >= 0 {
		return row[s.first : s.first+len(s.Points)]
	}
	for i, t := range s.Points {
		s.line[i] = row[t]
	}
	return s.line
}

func inARow(points []int) int {
	for i, t := range points {
		if t != points[0]+i {
			return -1
		}
	}
	if len(points) == 0 {
		return -1
	}
	return points[0]
}

// KilometreLoss is the median of the greatest loss over 1 km, m/s.
func (s *Stretch) KilometreLoss() float64 { return Quantile(s.kilometreSorted, 0.5) }

// EitherAtLeast is the probability that the loss reaches change (m/s), or its
// greatest part over 1 km reaches kilometre (m/s).
func (s *Stretch) EitherAtLeast(change, kilometre float64) float64 {
	n := 0
	for d, m := range s.Loss.joint {
		if m >= change || s.jointKilometre[d] >= kilometre {
			n++
		}
	}
	return float64(n) / windfield.Draws
}

// Place finds the pair of points between which the mean profile changes most.
// before holds each point's distance before the threshold of the path that
// asks, in m. Among changes within 0.05 kt of the greatest, the pair whose far
// end is nearest the threshold wins, then the shorter.
func (s *Stretch) Place(side *Side, before []float64) Place {
	s.lookUp()
	fall, rise := s.extremes(s.Mean)
	p := Place{Change: fall}
	if side.sign < 0 {
		p.Change = rise
	}
	least := p.Change - tie
	far, length := math.Inf(1), math.Inf(1)
	s.pairs(side.sign, least, func(i, j int) {
		f := max(math.Abs(before[i]), math.Abs(before[j]))
		l := math.Abs(before[i] - before[j])
		if f < far || (f == far && l < length) {
			far, length, p.Enter, p.End = f, l, i, j
		}
	})
	p.MaxSlope = s.steepest(side, p)
	return p
}

// pairs calls fn with every pair of observed points at most 4 km apart between
// which the mean profile changes by at least least. Most points are passed over
// at once: even the other end of the whole profile is too near to them.
func (s *Stretch) pairs(sign, least float64, fn func(i, j int)) {
	end := math.Inf(1)
	for i, v := range s.Mean {
		if s.Observed[i] {
			end = min(end, sign*v)
		}
	}
	for i, v := range s.Mean {
		if !s.Observed[i] || float64(sign*v)-end < least {
			continue
		}
		for j := i + 1; j < len(s.Mean) && j <= i+reachPoints; j++ {
			if s.Observed[j] && sign*(v-s.Mean[j]) >= least {
				fn(i, j)
			}
		}
	}
}

// steepest is the greatest change over 1000 ft of the mean profile between the
// ends of the side, per metre, scaled to the median of M: the mean profile is
// flatter than any of the profiles it is the mean of.
func (s *Stretch) steepest(side *Side, p Place) float64 {
	length := float64(float64(p.End-p.Enter) * Spacing)
	if length <= 0 || p.Change <= 0 {
		return 0
	}
	step := math.Min(slopeLength, length)
	best := 0.0
	for from := 0.0; from+step <= length+1e-9; from += Spacing / 4 {
		a := s.at(float64(p.Enter) + float64(from/Spacing))
		b := s.at(float64(p.Enter) + float64((from+step)/Spacing))
		best = math.Max(best, side.sign*(a-b)/step)
	}
	return best * side.Quantile(0.5) / p.Change
}

// at is the mean profile between its points.
func (s *Stretch) at(i float64) float64 {
	k := min(int(i), len(s.Mean)-2)
	f := i - float64(k)
	return float64(s.Mean[k]*(1-f)) + float64(s.Mean[k+1]*f)
}

// Quantile of ascending values, by linear interpolation between them.
func Quantile(sorted []float64, p float64) float64 {
	x := float64(p * float64(len(sorted)-1))
	k := min(int(x), len(sorted)-2)
	f := x - float64(k)
	return float64(sorted[k]*(1-f)) + float64(sorted[k+1]*f)
}

// share of the values that are at least limit.
func share(sorted []float64, limit float64) float64 {
	i, _ := slices.BinarySearch(sorted, limit)
	return float64(len(sorted)-i) / float64(len(sorted))
}
