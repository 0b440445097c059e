package synthetic

import (
	"math"

	"sockline/sensors/quantity"
)

// Front is a gust front: a line that moves over the ground; behind it a wind
// is added. It stands at X, Y at time Passes.
type Front struct {
	X, Y   float64 // a point of the line at Passes, m
	Passes float64 // s
	Toward float64 // direction of motion, degrees true
	Speed  float64 // of the line, m/s
	Step   quantity.Vector
	// Width is the half width of the transition: the step is
	// (1 + tanh(d/Width))/2 at d metres behind the line.
	Width float64
	// Curve is the radius of the line's curvature at Passes, m: the line is
	// then a circle that widens about a centre behind it. 0 means straight.
	Curve float64
	// Fades is the time constant, s, with which the step dies behind the line,
	// 0 means never.
	Fades float64
}

// Wind is the front's wind at x, y (m), t seconds after the start.
func (f *Front) Wind(x, y, t float64) (u, v float64) {
	behind := f.behind(x, y, t)
	share := (1 + math.Tanh(behind/f.Width)) / 2
	if f.Fades > 0 && behind > 0 && f.Speed > 0 {
		share *= math.Exp(-behind / (f.Speed * f.Fades))
	}
	return share * f.Step.East, share * f.Step.North
}

// behind is how far x, y lies behind the line at t, m; negative ahead of it.
func (f *Front) behind(x, y, t float64) float64 {
	sin, cos := math.Sincos(f.Toward * (math.Pi / 180))
	run := f.Speed * (t - f.Passes)
	x -= f.X
	y -= f.Y
	if f.Curve > 0 {
		return f.Curve + run - math.Hypot(x+f.Curve*sin, y+f.Curve*cos)
	}
	return run - (x*sin + y*cos)
}

// Rise is a wind that comes up, stays and goes. With a speed it comes from one
// side: its growth at a point is later by the distance from X, Y along Toward.
// Without a speed it comes up everywhere at once. It goes everywhere at once.
type Rise struct {
	Wind    quantity.Vector // m/s at full strength
	History History         // as felt at X, Y
	Stays   bool            // it never goes again; Holds and Fades say nothing
	X, Y    float64         // m
	Toward  float64         // degrees true
	Speed   float64         // m/s; 0 means everywhere at once
}

// At is the rise's wind at x, y (m), t seconds after the start.
func (r *Rise) At(x, y, t float64) (u, v float64) {
	delay := 0.0
	if r.Speed > 0 {
		sin, cos := math.Sincos(r.Toward * (math.Pi / 180))
		delay = ((x-r.X)*sin + (y-r.Y)*cos) / r.Speed
	}
	h := r.History
	share := History{Starts: h.Starts, Grows: h.Grows, Holds: math.Inf(1)}.At(t - delay)
	if !r.Stays {
		share = min(share, r.going(t))
	}
	return share * r.Wind.East, share * r.Wind.North
}

// going is what is left of the rise at t while it goes, 1 before.
func (r *Rise) going(t float64) float64 {
	begin := r.History.Starts + r.History.Grows + r.History.Holds
	if t <= begin {
		return 1
	}
	return r.History.At(t)
}

// Aloft is another wind above a height, as over the cold air of a clear night:
// what lies below does not feel it.
type Aloft struct {
	From, Speed   float64 // degrees true, m/s; the same at all heights above
	Above         float64 // m; 0: there is none
	Starts, Grows float64 // s: it takes the place of the wind below in this time
}

// over is the wind at the height z (m) at t (s), where it would be u, v without
// another wind aloft.
func (a *Aloft) over(u, v, z, t float64) (float64, float64) {
	if a.Above <= 0 || z < a.Above || t <= a.Starts {
		return u, v
	}
	share := 1.0
	if a.Grows > 0 {
		share = min((t-a.Starts)/a.Grows, 1)
	}
	wind := quantity.FromDirection(a.Speed, a.From)
	return u + share*(wind.East-u), v + share*(wind.North-v)
}

// Veer is a slow turn of the mean wind: linear from Starts for Takes seconds.
type Veer struct {
	By            float64 // degrees, clockwise positive
	Starts, Takes float64 // s
}

// At is how far it has turned at t, degrees.
func (v Veer) At(t float64) float64 {
	switch {
	case t <= v.Starts:
		return 0
	case t >= v.Starts+v.Takes:
		return v.By
	}
	return v.By * (t - v.Starts) / v.Takes
}

// Reaches is when the middle of the front passes x, y, in seconds from the
// start of the scene.
func (f *Front) Reaches(x, y float64) float64 {
	return f.Passes - f.behind(x, y, f.Passes)/f.Speed
}
