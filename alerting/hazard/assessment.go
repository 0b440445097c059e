// Package hazard judges a path: the wind field's M and its distribution
// against the configured levels give one Assessment per path and step. Next:
// lifecycle.
package hazard

import (
	"sockline/alerting"
	"sockline/alerting/airfield"
)

// Change is the greatest loss (or gain) of headwind between two observed
// points of a path at most 4 km apart, with its distribution: the quantity M
// of the design. All speeds in m/s as magnitudes (never negative), all
// distances in metres before the path's threshold.
type Change struct {
	Median, Low, High float64    // 50 %, 5 % and 95 % points of M
	Probability       [4]float64 // P(M >= the level's change), by alerting.Level; [0] unused
	CloseProbability  [4]float64 // P(M >= the level's change less the hysteresis)
	From, To          float64    // where it begins and ends, in the direction of flight
	AtEdge            bool       // an end lies at an end of an observed interval
	MaxSlope          float64    // greatest change over 305 m (1000 ft) within the pair, 1/s
	MeanSlope         float64    // change over its length, 1/s
	FBar              float64    // horizontal F-factor averaged over 1 km at the fastest declared approach; 0 for a gain
	Kilometre         float64    // loss over 1 km at which F-bar reaches its margin here, m/s; 0 for a gain
	// FBarVertical is what the sinking air would add to FBar at the height of the
	// glide path: an estimate by continuity, not a measurement. 0 where there is
	// no glide path.
	FBarVertical float64
	Cause        alerting.Cause
	Level        alerting.Level // highest level with Probability >= confidence
	HoldLevel    alerting.Level // highest level that still holds under the hysteresis
	Used         []int          // stations (indices, ascending) that carry the estimate
	Fewer        Fewer
}

// Fewer is what the median of M would be without one mast.
type Fewer struct {
	Known  bool // false: no mast was left out in this step
	Mast   int  // station (index)
	Median float64
}

// Other is what the assessment says of a kind that is no change of headwind;
// nil for loss and gain.
func (a *Assessment) Other(k alerting.Kind) *Other {
	switch k {
	case alerting.WindShift:
		return &a.Shift
	case alerting.VerticalShear:
		return &a.Vertical
	case alerting.Crosswind:
		return &a.Cross
	case alerting.Tailwind:
		return &a.Tail
	}
	return nil
}

// Assessment is what one step says of one path.
type Assessment struct {
	Path     int                 // index into the airfield's paths
	Observed []airfield.Interval // observed ground, from far to near
	Complete bool                // no point of the needed ground is unobserved
	Reason   string              // why it is not complete, in words; empty if complete
	Loss     Change              // meaningful only when len(Observed) > 0
	Gain     Change
	// Crosswind is the greatest difference of crosswind between live masts beside
	// this path, m/s, as measured; 0 with fewer than two.
	Crosswind float64
	// What is judged besides, each with its own Seen.
	Shift, Vertical, Cross, Tail Other
	Missing                      []int // stations (indices) beside this path that are not live
	Exercise                     bool  // a reading in use marks itself as synthetic
}
