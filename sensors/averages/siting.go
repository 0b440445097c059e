package averages

import (
	"math"

	"sockline/sensors/quantity"
)

// SitingSectors is the number of directions for which a site is known apart:
// around 0, 30, 60 degrees and so on.
const SitingSectors = 12

// Siting is what the place of a mast does to its wind, by the direction that it
// measures: by how much its direction is turned clockwise of what blows around
// it (degrees), and the logarithm of the ratio of the speeds.
type Siting struct {
	On               bool
	Turned, LogRatio [SitingSectors]float64
}

// SetSiting removes the siting from the block means of a mast from the next
// snapshot on. What people read stays as it was measured.
func (r *Recorder) SetSiting(station int, s Siting) { r.masts[station].siting = s }

// remove takes the siting out of a wind. Between two directions it is
// interpolated.
func (s *Siting) remove(v quantity.Vector) quantity.Vector {
	if !s.On || v.Speed() == 0 {
		return v
	}
	from := v.From()
	at := from / (360.0 / SitingSectors)
	low := int(at)
	part := at - float64(low)
	a, b := low%SitingSectors, (low+1)%SitingSectors
	turned := float64((1-part)*s.Turned[a]) + float64(part*s.Turned[b])
	ratio := float64((1-part)*s.LogRatio[a]) + float64(part*s.LogRatio[b])
	return quantity.FromDirection(v.Speed()*math.Exp(-ratio), from-turned)
}
