package hazard

import (
	"sockline/alerting"
	"sockline/alerting/shear"
	"sockline/sensors/quantity"
)

// StandsAlone are the odds, from an even-handed prior, that a mast is wrong
// (windfield.Posterior.Alone) from which beyond-margin must not rest on it alone:
// its neighbours speak against it or at least do not bear it out.
const StandsAlone = 0.25

const (
	// leastBeyond is under the least loss at which beyond-margin can be
	// configured to open, m/s: the margin is 10 kt or more, and merges with a large
	// change less than 3 kt below it.
	leastBeyond = 7 * quantity.Knot
	// leastConfidence is the least that can be configured.
	leastConfidence = 0.5
)

// MayRest tells whether a loss may rest on one mast: whether any levels that
// can be configured could call it beyond-margin, so that Restrain needs to know
// the loss without that mast. a has been judged from s. Those in force are not
// all that are meant: the step may be judged again by others.
func MayRest(a *Assessment, s *shear.Stretch) bool {
	return a.Loss.Level == alerting.BeyondMargin || s.EitherAtLeast(leastBeyond, a.Loss.Kilometre) >= leastConfidence
}

// Restrain takes beyond-margin from a judged loss that rests on one mast: one
// that stands alone, without which a noticeable loss would not be told. without
// is P(M >= Noticeable) without that mast. What the mast sees stays a large
// loss: it may be the one that is right.
func (l Levels) Restrain(a *Assessment, without float64) {
	if a.Loss.Level == alerting.BeyondMargin && without < l.Confidence {
		a.Loss.Level = alerting.Large
		a.Loss.HoldLevel = min(a.Loss.HoldLevel, alerting.Large)
	}
}
