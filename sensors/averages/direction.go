package averages

import (
	"math"
	"slices"

	"sockline/sensors/quantity"
)

// leastResultant is the mean resultant length below which directions have no
// mean: opposed directions leave about 1e-16, not 0.
const leastResultant = 1e-9

// circular is the mean direction in degrees [0, 360) and the standard
// deviation of directions whose mean sine and cosine are given, in degrees.
// ok is false where the mean direction is not defined.
//
// The deviation is asin(e) (1 + (2/sqrt(3) - 1) e^3) with e = sqrt(1 - R^2)
// (R.J. Yamartino, "A comparison of several single-pass estimators of the
// standard deviation of wind direction", J. Climate Appl. Meteor. 23, 1984;
// from memory). It never exceeds 103.93 degrees.
func circular(sin, cos float64) (mean, deviation float64, ok bool) {
	squared := float64(sin*sin) + float64(cos*cos)
	e := math.Sqrt(math.Max(0, 1-squared)) // rounding can make R exceed 1
	deviation = math.Asin(e) * (1 + float64((2/math.Sqrt(3)-1)*e*e*e)) * (180 / math.Pi)
	mean = quantity.NormalizeDegrees(math.Atan2(sin, cos) * (180 / math.Pi))
	return mean, deviation, squared >= leastResultant*leastResultant
}

// arc is the smallest arc that holds all the directions, in degrees: it runs
// clockwise from one extreme to the other over width.
func arc(directions []float64) (from, to, width float64) {
	if len(directions) == 0 {
		return 0, 0, 0
	}
	slices.Sort(directions)
	last := len(directions) - 1
	// What is left out is the widest gap between neighbours.
	gap := directions[0] + 360 - directions[last]
	from, to = directions[0], directions[last]
	for i := range last {
		if g := directions[i+1] - directions[i]; g > gap {
			gap, from, to = g, directions[i+1], directions[i]
		}
	}
	return from, to, 360 - gap
}

// turn is the angle from one direction to another, the shorter way: positive
// clockwise (the wind veers), in (-180, 180]. Both are within [0, 360).
func turn(from, to float64) float64 {
	d := to - from
	for d > 180 {
		d -= 360
	}
	for d <= -180 {
		d += 360
	}
	return d
}
