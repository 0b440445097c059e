// Package correction takes readings and gives the speed that the same wind
// would have at 10 m, and over open ground if asked for, beside the speed that
// was measured, which is never written over. Where a station has no roughness
// configured the factor is exactly 1. Next: averages, which makes vectors of
// the corrected speeds.
//
// The laws are those of a neutral surface layer: fair in a fresh wind, poor in
// light air and on a calm night, and good to one figure in the roughness.
package correction

import (
	"math"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

const (
	// StandardHeight is the height that winds are stated for, in m (ICAO Annex
	// 3 and WMO-No. 8; from memory).
	StandardHeight = 10.0
	// openLength is the roughness length of open ground, in m (WMO-No. 8).
	openLength = 0.03
	// blendingHeight is where the ground near the mast no longer matters, in m
	// (WMO-No. 8, volume I, chapter 5, annex; from memory).
	blendingHeight = 60.0
)

// Class is one of the classes of ground of A.G. Davenport and J. Wieringa
// (J. Wieringa, "Updating the Davenport roughness classification", J. Wind
// Eng. Ind. Aerodyn. 41, 1992).
type Class struct {
	Name   string
	Length float64 // roughness length z0, m
}

// Classes lists the classes, the smoothest first. The last two are lower
// bounds.
func Classes() []Class {
	return []Class{
		{"sea", 0.0002}, {"smooth", 0.005}, {"open", openLength}, {"roughly-open", 0.10},
		{"rough", 0.25}, {"very-rough", 0.5}, {"closed", 1.0}, {"chaotic", 2.0},
	}
}

// ClassLength is the roughness length of a class in m; false if there is no
// class of this name.
func ClassLength(name string) (float64, bool) {
	for _, c := range Classes() {
		if c.Name == name {
			return c.Length, true
		}
	}
	return 0, false
}

// LogLaw is the factor from the speed at the height from to that at the height
// to, both in m, over ground of roughness length z0 in m: U(z) = (u*/k)
// ln(z/z0), neutral, without a displacement height. Both heights must exceed
// z0.
func LogLaw(from, to, z0 float64) float64 { return math.Log(to/z0) / math.Log(from/z0) }

// OpenExposure is the factor from the speed at the height z in m over ground
// of roughness length z0 in m to that at 10 m over open ground:
// ln(60/z0)/ln(z/z0) ln(10/0.03)/ln(60/0.03), by way of the wind at 60 m that
// both have in common (WMO-No. 8, volume I, chapter 5, annex; from memory).
func OpenExposure(z, z0 float64) float64 {
	return LogLaw(z, blendingHeight, z0) * LogLaw(blendingHeight, StandardHeight, openLength)
}

// Corrected is a speed as measured and as corrected.
type Corrected struct {
	Raw    float64 // as measured, m/s
	Speed  float64 // at 10 m, m/s
	Gust   float64 // at 10 m, m/s, meaningful only if the reading has one
	Factor float64 // Speed / Raw
}

// Corrector corrects the readings of one station.
type Corrector struct{ sectors []sector }

// sector is a stretch of directions with one factor.
type sector struct{ from, width, factor float64 }

// New makes the corrector of a station.
func New(s sensors.Station) *Corrector {
	c := &Corrector{}
	for _, r := range s.Roughness {
		factor := LogLaw(s.Height, StandardHeight, r.Length)
		if s.Exposure {
			factor = OpenExposure(s.Height, r.Length)
		}
		width := quantity.NormalizeDegrees(r.To - r.From)
		if width == 0 {
			width = 360
		}
		c.sectors = append(c.sectors, sector{r.From, width, factor})
	}
	return c
}

// Factor is the factor for a wind from a direction in degrees true. A sector
// holds its first direction and not its last.
func (c *Corrector) Factor(from float64) float64 {
	for _, s := range c.sectors {
		if quantity.NormalizeDegrees(from-s.from) < s.width {
			return s.factor
		}
	}
	return 1
}

// Of corrects a reading. Gusts take the factor of the mean: the ground makes
// them vary less with height than the mean does, so a corrected gust is on the
// high side where the factor exceeds 1.
func (c *Corrector) Of(r sensors.Reading) Corrected {
	f := c.Factor(r.From)
	return Corrected{Raw: r.Speed, Speed: r.Speed * f, Gust: r.Gust * f, Factor: f}
}
