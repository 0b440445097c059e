// Package front takes the block means of all masts, step by step, and tells
// which gust fronts and wind shifts pass over them: where the line lies, where
// it goes and how fast, how the wind changes behind it, and when it reaches
// each threshold and each mast. Next: hazard, by way of engine.
//
// Each mast is watched by itself for a sudden change (onset.go). Changes that
// agree are put together (group.go) into a track (track.go), whose line is what the times
// of the changes, their direction, and the masts that have not been reached
// make likely (line.go); a plane fit by least squares (plane.go) tests whether
// one line explains the times at all. A slow turn of the wind, which has no
// sharp edge at any mast, is found in the mean of all of them (shift.go).
package front

import (
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// Kind of a front.
type Kind string

// The kinds. A gust front has an edge that each mast sees within a minute or
// so; a wind shift is the slow turn of a cold front or of the day.
const (
	GustFront Kind = "gust-front"
	WindShift Kind = "wind-shift"
)

// Mast is where a mast stands in the local plane, m. One that is Aloft stands
// above another on the same tower and is left out: it would count twice.
type Mast struct {
	ID    string
	X, Y  float64
	Aloft bool
}

// Place is somewhere besides the masts for which the arrival is wanted, m.
type Place struct {
	Name string
	X, Y float64
}

// Front is one front as it stands after a step. Metres east and north of the
// reference point, m/s, degrees true.
type Front struct {
	Kind       Kind
	First      sensors.Instant // when it reached the first mast; with Kind it names the front
	Confidence float64         // probability that this is one line and not chance
	Hit        []int           // masts that it has reached, ascending

	// Moving says that it has a line which moves over the ground. Without it
	// (a slow turn everywhere) nothing from X to SpeedHigh is meant.
	Moving bool
	X, Y   float64 // a point of the line now: the one nearest to the middle of the masts
	// Toward is the direction the line moves to, TowardSD its standard error,
	// degrees; the line itself lies across it.
	Toward, TowardSD float64
	Band             float64 // half the width of the 90 % band about the line at X, Y, m
	Speed            float64 // of the line; median, and the 5 % and 95 % points
	SpeedLow         float64
	SpeedHigh        float64
	// Aligned says that the masts reached so far are two or stand in a line:
	// only Apparent, the speed with which it runs along that line, is measured;
	// heading and speed lean on the direction of the change and on what is known
	// of other fronts.
	Aligned  bool
	Apparent float64 // m/s along that line; 0 if not Aligned

	Before, After quantity.Vector // mean wind ahead of it and behind it
	Change        quantity.Vector // After less Before
	Turn          float64         // of the direction, degrees, clockwise positive; 0 where either is too light to have one
	Lasts         float64         // s from the begin to the end of the change at a mast

	Arrivals []Arrival // places first, then masts, each in configured order
}

// Arrival is when a front reaches a place: half of the change has come then.
type Arrival struct {
	Place            string
	Mast             int // index; -1: no mast
	X, Y             float64
	At               sensors.Instant
	Earliest, Latest sensors.Instant // 90 %
	Arrived          bool
	// Predicted is what At was a minute before the mast saw the front, 0 if
	// nothing was said then. It is told of masts only: elsewhere nobody sees it.
	Predicted sensors.Instant
}

// Between tells whether the line, within its band, lies somewhere between two
// places (m): whether a change of wind from one to the other may be this front.
func (f *Front) Between(x0, y0, x1, y1 float64) bool {
	if !f.Moving {
		return false
	}
	sin, cos := sincos(f.Toward)
	a := float64((x0-f.X)*sin) + float64((y0-f.Y)*cos)
	b := float64((x1-f.X)*sin) + float64((y1-f.Y)*cos)
	return min(a, b) <= f.Band && max(a, b) >= -f.Band
}

// Same tells whether two results are of one front.
func (f *Front) Same(g *Front) bool { return f.Kind == g.Kind && f.First == g.First }
