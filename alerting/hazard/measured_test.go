package hazard

import (
	"sockline/alerting/shear"
	"sockline/alerting/windfield"
)

// measured is a stretch of n points whose headwind falls by change (m/s)
// between its first two points in this share of the draws, and is steady in
// the others.
func measured(n int, change, share float64) *shear.Stretch {
	points := make([]int, n)
	for i := range points {
		points[i] = i
	}
	s := shear.NewStretch(points)
	p := &windfield.Posterior{Mean: make([]float64, n), Draws: make([]float64, n*windfield.Draws)}
	falling := int(share*windfield.Draws + 0.5)
	for d := range falling {
		p.Draws[d*n] = change
	}
	p.Mean[0] = change * float64(falling) / windfield.Draws
	for i := range s.Observed {
		s.Observed[i] = true
	}
	s.Measure(p)
	return s
}
