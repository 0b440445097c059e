package hazard

import (
	"sockline/alerting"
	"sockline/alerting/shear"
	"sockline/alerting/windfield"
	"sockline/sensors/quantity"
)

// Levels is what an operator has decided a change must amount to. All speeds
// in m/s.
type Levels struct {
	Noticeable, Large float64 // change of headwind
	Margin            float64 // loss that uses up the stall margin of the slowest aircraft
	MarginFBar        float64 // F-factor averaged over 1 km
	FastestApproach   float64 // airspeed of the fastest declared approach
	Confidence        float64 // probability at which a level opens
	Hysteresis        float64 // how far below a level the change must fall before it counts as over
	Limits            Limits  // of everything that is no change of headwind
}

// mergeWithin: when the large change and the margin lie closer than this, in
// m/s, telling them apart would be false precision: the higher is issued.
const mergeWithin = 3 * quantity.Knot

// Merged tells whether the levels large and beyond-margin are issued as one,
// the higher.
func (l Levels) Merged() bool { return l.Margin-l.Large < mergeWithin }

// Beyond is the loss at which beyond-margin opens, m/s.
func (l Levels) Beyond() float64 {
	if l.Merged() {
		return min(l.Margin, l.Large)
	}
	return l.Margin
}

// LossOfFBar is the loss of headwind over 1 km, in m/s, whose horizontal
// F-factor averaged over 1 km is fbar at the ground speed:
// F_h = V_g (H_in - H_out) / (g L), from F = (1/g) dW_x/dt - w/V of R.L. Bowles,
// "Reducing windshear risk through airborne systems technology", 17th ICAS
// Congress, 1990 (from memory). The part of the vertical wind is left out:
// near the ground it is about nil.
func LossOfFBar(fbar, groundSpeed float64) float64 {
	return fbar * quantity.StandardGravity * fbarLength / groundSpeed
}

const (
	fbarLength  = 1000.0 // m
	leastGround = 20.0   // m/s: no approach is flown slower over the ground
	// HoldFBar is the hysteresis of the F-factor: an alert that opened for it
	// holds down to nine tenths, as the loss holds down to 2 of 15 kt less.
	HoldFBar = 0.9
)

// View is how one path looks at a stretch: the distance of each of its points
// before the path's threshold, m, and which way the path is flown along it.
type View struct {
	Before   []float64
	Reversed bool // the flight runs against the order of the stretch's points
	// Glide is the slope of the glide path and Crossing its height above the
	// threshold, m; both 0 where no glide path is flown.
	Glide, Crossing float64
}

// Judge fills loss and gain of an assessment from a measured stretch.
func Judge(a *Assessment, s *shear.Stretch, v View, l Levels) {
	judgeSide(&a.Loss, s, &s.Loss, v, l)
	judgeSide(&a.Gain, s, &s.Gain, v, l)
	ground := l.FastestApproach - meanHeadwind(s, a.Loss, v)
	ground = max(ground, leastGround)
	// F-bar counts for a loss only.
	kilometre := LossOfFBar(l.MarginFBar, ground)
	a.Loss.FBar = s.KilometreLoss() * ground / (quantity.StandardGravity * fbarLength)
	a.Loss.FBarVertical = verticalFBar(s.KilometreLoss()/fbarLength, v, a.Loss, l)
	a.Loss.Probability[alerting.BeyondMargin] = s.EitherAtLeast(l.Beyond(), kilometre)
	a.Loss.CloseProbability[alerting.BeyondMargin] = s.EitherAtLeast(l.Beyond()-l.Hysteresis, kilometre*HoldFBar)
	a.Loss.Kilometre = kilometre
	l.Settle(a)
}

// Settle gives loss and gain their levels from their probabilities. Gain has
// no third level: it uses up no margin.
func (l Levels) Settle(a *Assessment) {
	a.Loss.Level = highest(a.Loss.Probability, l, alerting.BeyondMargin)
	a.Loss.HoldLevel = highest(a.Loss.CloseProbability, l, alerting.BeyondMargin)
	a.Gain.Level = highest(a.Gain.Probability, l, alerting.Large)
	a.Gain.HoldLevel = highest(a.Gain.CloseProbability, l, alerting.Large)
}

func judgeSide(c *Change, s *shear.Stretch, side *shear.Side, v View, l Levels) {
	used := c.Used
	*c = Change{Used: used}
	c.Low, c.Median, c.High = side.Quantile(0.05), side.Quantile(0.5), side.Quantile(0.95)
	for level, change := range [...]float64{alerting.Noticeable: l.Noticeable, alerting.Large: l.Large} {
		if change > 0 {
			c.Probability[level] = side.AtLeast(change)
			c.CloseProbability[level] = side.AtLeast(change - l.Hysteresis)
		}
	}
	c.Cause = causeOf(side.Kinds(l.Noticeable))
	p := s.Place(side, v.Before)
	enter, end := p.Enter, p.End
	if v.Reversed {
		enter, end = end, enter
	}
	c.From, c.To = v.Before[enter], v.Before[end]
	c.AtEdge = atEdge(s, p.Enter) || atEdge(s, p.End)
	c.MaxSlope = p.MaxSlope
	if length := c.From - c.To; length > 0 {
		c.MeanSlope = c.Median / length
		c.MaxSlope = max(c.MaxSlope, c.MeanSlope)
	}
}

// atEdge tells whether a point is the last observed one before ground that is
// not observed. The ends of the path itself count too: the change may go on
// beyond them.
func atEdge(s *shear.Stretch, i int) bool {
	return i == 0 || i == len(s.Observed)-1 || !s.Observed[i-1] || !s.Observed[i+1]
}

// meanHeadwind over the ground of the loss, m/s, for the path's flight.
func meanHeadwind(s *shear.Stretch, c Change, v View) float64 {
	sum, n := 0.0, 0
	for i, b := range v.Before {
		if b <= c.From && b >= c.To {
			sum += s.Mean[i]
			n++
		}
	}
	if n == 0 {
		return 0
	}
	if v.Reversed {
		sum = -sum
	}
	return sum / float64(n)
}

// highest level up to most whose probability reaches the confidence.
func highest(p [4]float64, l Levels, most alerting.Level) alerting.Level {
	for level := most; level > alerting.NoLevel; level-- {
		if p[level] >= l.Confidence {
			return level
		}
	}
	return alerting.NoLevel
}

// verticalFBar is what sinking air adds to the F-factor over the steepest
// kilometre of a loss, at the height h of the glide path over its middle. In an
// outflow that is alike in all directions the air sinks with w = -2 h dU/dx, so
// that -w/V_a = 2 h (dU/dx) / V_a (G.P. Byrd, F.H. Proctor, R.L. Bowles,
// "Evaluation of a technique to quantify microburst windshear hazard potential
// to aircraft", IEEE CDC 1990; from memory).
func verticalFBar(slope float64, v View, c Change, l Levels) float64 {
	if v.Glide == 0 || l.FastestApproach <= 0 {
		return 0
	}
	h := v.Crossing + float64(float64(v.Glide*(c.From+c.To))/2)
	return 2 * max(h, 0) * slope / l.FastestApproach
}

// sureCause is the share of the draws with a noticeable change that must agree
// on what brings it about.
const sureCause = 0.7

// causeOf tells the cause from how many of the draws with a noticeable change
// hold which pattern.
func causeOf(kinds [4]int) alerting.Cause {
	all := 0
	for _, n := range kinds {
		all += n
	}
	least := int(sureCause * float64(all))
	switch {
	case all == 0:
		return alerting.Unresolved
	case kinds[windfield.OutflowPattern] > least:
		return alerting.Outflow
	case kinds[windfield.FrontPattern] > least:
		return alerting.GustFront
	}
	return alerting.Unresolved
}
