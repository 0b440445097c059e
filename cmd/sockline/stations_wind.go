package main

import (
	"math"

	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quantity"
)

// windTurns is how many steps pass between two winds of a mast that are told
// with its health. Every mast has its turn, so that no step works out many.
const windTurns = 5

// windObject is the wind of a mast as people read it: m/s and degrees true,
// corrected as configured, at the height of the anemometer or 10 m.
type windObject struct {
	At         string      `json:"at"`
	InstantMS  *float64    `json:"instant_ms"` // mean of 3 s; null where it is not there
	ShortMS    *float64    `json:"short_ms"`   // of 10 s
	Two        *meanObject `json:"two_minutes"`
	Ten        *meanObject `json:"ten_minutes"`
	Direction  toldObject  `json:"direction"`
	GustTold   bool        `json:"gust_told"` // it exceeds the two-minute mean by 5 m/s or more
	Marked     *turnObject `json:"marked_discontinuity"`
	Shift      *turnObject `json:"wind_shift"`
	Squall     *turnObject `json:"squall"`
	Turbulence *unrest     `json:"turbulence"`
}

// meanObject is the wind over one stretch.
type meanObject struct {
	SpeedMS     float64  `json:"speed_ms"`    // scalar
	MeasuredMS  float64  `json:"measured_ms"` // the same before any correction
	VectorMS    float64  `json:"vector_ms"`
	FromDeg     *float64 `json:"from_deg"` // null where it comes from all sides
	DeviationMS float64  `json:"speed_deviation_ms"`
	FromSpread  *float64 `json:"direction_deviation_deg"`
	GustMS      *float64 `json:"gust_ms"` // greatest mean of 3 s
	LullMS      *float64 `json:"lull_ms"`
	MaxMS       float64  `json:"max_ms"` // readings
	MinMS       float64  `json:"min_ms"`
	Seconds     int      `json:"seconds"` // with data
}

// toldObject is how the direction of the last ten minutes is to be told.
type toldObject struct {
	Told      string  `json:"told"` // mean, between, variable
	FromDeg   float64 `json:"from_deg"`
	ToDeg     float64 `json:"to_deg"`
	SpreadDeg float64 `json:"spread_deg"`
}

// turnObject is a change of the wind.
type turnObject struct {
	At      string  `json:"at"`
	TurnDeg float64 `json:"turn_deg"`
	RiseMS  float64 `json:"rise_ms"`
}

// unrest is the turbulence at one mast, at its own height: no class of
// turbulence that was made for aircraft applies to it.
type unrest struct {
	Intensity  float64  `json:"intensity"`
	GustFactor float64  `json:"gust_factor"`
	MastEDR    *float64 `json:"mast_height_edr"` // m^(2/3)/s
	HeightM    float64  `json:"height_m"`
}

// windOf puts a wind into its object.
func windOf(w *averages.Wind, st *sensors.Station) *windObject {
	o := &windObject{
		At: seconds(w.At), Two: meanOf(&w.Two), Ten: meanOf(&w.Ten), GustTold: w.Gusting,
		Marked: turnOf(w.Discontinuity), Shift: turnOf(w.Shift), Squall: turnOf(w.Squall),
		Direction: toldObject{
			Told: toldAs(w.Variation.Kind), FromDeg: degrees(w.Variation.From), ToDeg: degrees(w.Variation.To),
			SpreadDeg: decimals(w.Variation.Spread, 0),
		},
	}
	if w.Instant.Present {
		o.InstantMS = pointer(decimals(w.Instant.Speed, 2))
	}
	if w.Short.Present {
		o.ShortMS = pointer(decimals(w.Short.Speed, 2))
	}
	if w.Intensity > 0 {
		o.Turbulence = &unrest{Intensity: decimals(w.Intensity, 3), GustFactor: decimals(w.GustFactor, 2), HeightM: st.Height}
		if w.Dissipation.Present {
			o.Turbulence.MastEDR = pointer(decimals(w.Dissipation.Rate, 3))
		}
	}
	return o
}

func toldAs(k averages.VariationKind) string {
	switch k {
	case averages.Between:
		return "between"
	case averages.Variable:
		return "variable"
	}
	return "mean"
}

func meanOf(m *averages.Mean) *meanObject {
	if !m.Present {
		return nil
	}
	o := &meanObject{
		SpeedMS: decimals(m.Speed, 2), MeasuredMS: decimals(m.Raw, 2), VectorMS: decimals(m.Vector.Speed(), 2),
		DeviationMS: decimals(m.SpeedDeviation, 2), MaxMS: decimals(m.Max, 2), MinMS: decimals(m.Min, 2), Seconds: m.Seconds,
	}
	if m.Directed {
		o.FromDeg, o.FromSpread = pointer(degrees(m.Vector.From())), pointer(decimals(m.DirectionDeviation, 1))
	}
	if m.Gusts {
		o.GustMS, o.LullMS = pointer(decimals(m.Gust, 2)), pointer(decimals(m.Lull, 2))
	}
	return o
}

func turnOf(c *averages.Change) *turnObject {
	if c == nil {
		return nil
	}
	return &turnObject{At: seconds(c.At), TurnDeg: decimals(c.Turn, 0), RiseMS: decimals(c.Rise, 1)}
}

// decimals rounds to so many places, for reading.
func decimals(x float64, places int) float64 {
	scale := math.Pow10(places)
	return math.Round(x*scale) / scale
}

// degrees rounds a direction to a tenth within [0, 360).
func degrees(from float64) float64 { return quantity.NormalizeDegrees(decimals(from, 1)) }

func pointer[T any](v T) *T { return &v }
