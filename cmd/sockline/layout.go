package main

import (
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"

	"sockline/alerting/airfield"
	"sockline/sensors"
)

// layout is the plan of an airfield as the page draws it, ready-made.
type layout struct {
	json []byte
	id   string // another one with every other plan
	day  sensors.Instant
}

// planObject is a layout in metres east and north of the reference point and
// degrees true.
type planObject struct {
	Airfield  string       `json:"airfield"`
	Name      string       `json:"name"`
	Runways   []planRunway `json:"runways"`
	Paths     []planPath   `json:"paths"`
	Masts     []planMast   `json:"masts"`
	Variation *float64     `json:"variation_deg"` // null where the magnetic model does not reach
	ReachM    float64      `json:"reach_m"`       // how far a mast speaks for the ground
}

type planRunway struct {
	Ends    []planEnd `json:"ends"`
	WidthM  float64   `json:"width_m"`
	LengthM float64   `json:"length_m"`
}

type planEnd struct {
	Designator string  `json:"designator"`
	EastM      float64 `json:"east_m"`
	NorthM     float64 `json:"north_m"`
	Bearing    float64 `json:"bearing_true_deg"`
}

type planPath struct {
	Runway    string  `json:"runway"`
	Operation string  `json:"operation"`
	EastM     float64 `json:"east_m"` // its threshold
	NorthM    float64 `json:"north_m"`
	Bearing   float64 `json:"bearing_true_deg"`
	FromM     float64 `json:"length_from_m"` // before the threshold
	ToM       float64 `json:"length_to_m"`
}

type planMast struct {
	ID      string  `json:"id"`
	EastM   float64 `json:"east_m"`
	NorthM  float64 `json:"north_m"`
	HeightM float64 `json:"height_m"`
}

// drawn is the layout at a step. It changes with the configuration, and with
// the magnetic variation from one UTC day to the next.
func (r *reporter) drawn(at sensors.Instant) layout {
	const aDay = sensors.Instant(24 * 3600 * 1000)
	if day := at - at%aDay; r.layout.json == nil || r.layout.day != day {
		var variation *float64
		if v, err := r.variation(at); err == nil {
			variation = &v
		}
		r.layout = newLayout(r.cfg.Airfield, r.cfg.Analysis.Reach, variation)
		r.layout.day = day
	}
	return r.layout
}

func newLayout(a *airfield.Airfield, reach float64, variation *float64) layout {
	o := planObject{
		Airfield: a.ID, Name: a.Name, Variation: variation, ReachM: reach,
		Runways: []planRunway{}, Paths: []planPath{}, Masts: []planMast{},
	}
	for _, rw := range a.Runways {
		plan := planRunway{WidthM: decimals(rw.Width, 1), LengthM: decimals(rw.Length, 1)}
		for _, e := range rw.Ends {
			plan.Ends = append(plan.Ends, planEnd{e.Designator, decimals(e.Threshold.X, 1), decimals(e.Threshold.Y, 1), decimals(e.Bearing, 2)})
		}
		o.Runways = append(o.Runways, plan)
	}
	for _, p := range a.Paths {
		east, north := p.At(0)
		extent := p.Extent()
		o.Paths = append(o.Paths, planPath{
			p.Runway(), p.Operation(), decimals(east, 1), decimals(north, 1), decimals(p.BearingTrue(), 2),
			decimals(extent.From, 1), decimals(extent.To, 1),
		})
	}
	for _, m := range a.Masts {
		o.Masts = append(o.Masts, planMast{m.ID, decimals(m.X, 1), decimals(m.Y, 1), decimals(m.Height, 1)})
	}
	text, err := json.Marshal(o)
	if err != nil { // finite numbers and texts always have a JSON form
		return layout{}
	}
	sum := sha256.Sum256(text)
	return layout{json: text, id: hex.EncodeToString(sum[:8])}
}
