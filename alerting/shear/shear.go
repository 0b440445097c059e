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
	seen []int     // the observed points
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
	s.seen = make([]int, 0, n)
	return s
}

// Measure finds loss and gain on the observed points. At least two must be
// observed.
func (s *Stretch) Measure(p *windfield.Posterior) {
	nt := len(p.Mean)
	s.lookUp()
	for d := range windfield.Draws {
		row := p.Draws[d*nt : (d+1)*nt]
		for i, t := range s.Points {
			s.line[i] = row[t]
		}
		loss, gain := s.extremes(s.line)
		kilometre := s.kilometre()
		s.Loss.Sorted[d], s.Gain.Sorted[d] = loss, gain
		s.kilometreSorted[d] = kilometre
		s.Loss.joint[d], s.Gain.joint[d], s.jointKilometre[d] = loss, gain, kilometre
	}
	s.Loss.kinds, s.Gain.kinds = &p.Kinds, &p.Kinds
	slices.Sort(s.Loss.Sorted)
	slices.Sort(s.Gain.Sorted)
	slices.Sort(s.kilometreSorted)
	for i, t := range s.Points {
		s.Mean[i] = p.Mean[t]
	}
}

// lookUp lists the observed points.
func (s *Stretch) lookUp() {
	s.seen = s.seen[:0]
	for i, observed := range s.Observed {
		if observed {
			s.seen = append(s.seen, i)
		}
	}
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

// extremes of a line of the stretch: the greatest fall and the greatest rise from an observed
// point to a later one at most reachPoints on, in one pass that keeps the
// highest and the lowest of the window behind it. When the point that leaves
// the window is one of them, the window is searched anew; that is seldom.
func (s *Stretch) extremes(line []float64) (fall, rise float64) {
	seen := s.seen
	if len(seen) == 0 {
		return 0, 0
	}
	head := 0
	high, low := line[seen[0]], line[seen[0]]
	for k := 1; k < len(seen); k++ {
		j := seen[k]
		for ; seen[head] < j-reachPoints; head++ {
			if gone := line[seen[head]]; gone == high || gone == low {
				high, low = span(line, seen[head+1:k])
			}
		}
		v := line[j]
		if d := high - v; d > fall {
			fall = d
		}
		if d := v - low; d > rise {
			rise = d
		}
		if v > high {
			high = v
		}
		if v < low {
			low = v
		}
	}
	return fall, rise
}

// span is the highest and the lowest of line at the points; -Inf and +Inf for
// none, which no change is measured from.
func span(line []float64, points []int) (high, low float64) {
	high, low = math.Inf(-1), math.Inf(1)
	for _, i := range points {
		if v := line[i]; v > high {
			high = v
		}
		if v := line[i]; v < low {
			low = v
		}
	}
	return high, low
}

// kilometre is the greatest fall over 1 km.
func (s *Stretch) kilometre() (fall float64) {
	for j := kilometrePoints; j < len(s.line); j++ {
		i := j - kilometrePoints
		if d := s.line[i] - s.line[j]; d > fall && s.Observed[i] && s.Observed[j] {
			fall = d
		}
	}
	return fall
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
	s.pairs(side.sign, func(i, j int, change float64) {
		if change < least {
			return
		}
		f := max(math.Abs(before[i]), math.Abs(before[j]))
		l := math.Abs(before[i] - before[j])
		if f < far || (f == far && l < length) {
			far, length, p.Enter, p.End = f, l, i, j
		}
	})
	p.MaxSlope = s.steepest(side, p)
	return p
}

// pairs calls fn with every pair of observed points at most 4 km apart.
func (s *Stretch) pairs(sign float64, fn func(i, j int, change float64)) {
	for i := range s.Mean {
		if !s.Observed[i] {
			continue
		}
		for j := i + 1; j < len(s.Mean) && j <= i+reachPoints; j++ {
			if s.Observed[j] {
				fn(i, j, sign*(s.Mean[i]-s.Mean[j]))
			}
		}
	}
}

// steepest is the greatest change over 1000 ft of the mean profile between the
// ends of the side, per metre, scaled to the median of M: the mean profile is
// flatter than any of the profiles it is the mean of.
func (s *Stretch) steepest(side *Side, p Place) float64 {
	length := float64(p.End-p.Enter) * Spacing
	if length <= 0 || p.Change <= 0 {
		return 0
	}
	step := math.Min(slopeLength, length)
	best := 0.0
	for from := 0.0; from+step <= length+1e-9; from += Spacing / 4 {
		a := s.at(float64(p.Enter) + from/Spacing)
		b := s.at(float64(p.Enter) + (from+step)/Spacing)
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
	x := p * float64(len(sorted)-1)
	k := min(int(x), len(sorted)-2)
	f := x - float64(k)
	return float64(sorted[k]*(1-f)) + float64(sorted[k+1]*f)
}

// share of the values that are at least limit.
func share(sorted []float64, limit float64) float64 {
	i, _ := slices.BinarySearch(sorted, limit)
	return float64(len(sorted)-i) / float64(len(sorted))
}
