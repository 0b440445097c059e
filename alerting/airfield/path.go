package airfield

import "math"

// The two operations of a runway end. Both include the roll, which is why
// they are not called approach and departure.
const (
	Landing = "landing"
	TakeOff = "take-off"
)

// Ground that must be observed before anything is said of a path: it runs
// from neededBefore metres before the threshold to neededRoll metres beyond
// it for a landing, and to neededBeyond metres beyond the far end for a
// take-off.
const (
	neededBefore = 2000.0
	neededRoll   = 500.0
	neededBeyond = 2000.0
)

// Point is a place in the airfield's plane: metres east (X) and north (Y) of
// the reference point.
type Point struct{ X, Y float64 }

// Path is the ground below one landing or take-off, a straight line in the
// airfield's plane. Distances along it are metres before the threshold of its
// runway end, negative beyond it, so they fall in the direction of flight.
// Only New makes a usable Path.
type Path struct {
	runway      string
	operation   string
	bearing     float64
	length      float64 // of the runway, threshold to threshold
	threshold   Point
	east, north float64 // unit vector of flight in the plane
	slope       float64 // tangent of the glide path, 0 for a take-off
	crossing    float64 // height above the threshold
	extent      Interval
	needed      Interval
}

// newPath is the path of an operation on the end from, towards the end to.
func newPath(from, to End, operation string) Path {
	dx, dy := to.Threshold.X-from.Threshold.X, to.Threshold.Y-from.Threshold.Y
	length := math.Hypot(dx, dy)
	p := Path{
		runway: from.Designator, operation: operation, bearing: from.Bearing, length: length,
		threshold: from.Threshold, east: dx / length, north: dy / length,
	}
	if operation == Landing {
		p.slope, p.crossing = math.Tan(from.GlidePath*degree), from.CrossingHeight
		p.extent = Interval{From: from.LandingLength, To: -length}
		p.needed = p.extent.clip(Interval{From: neededBefore, To: -neededRoll})
		return p
	}
	p.extent = Interval{From: 0, To: -(length + from.TakeoffLength)}
	p.needed = p.extent.clip(Interval{From: 0, To: -(length + neededBeyond)})
	return p
}

// Runway is the designator of the runway end, such as "07" or "22L".
func (p Path) Runway() string { return p.runway }

// Operation is Landing or TakeOff.
func (p Path) Operation() string { return p.operation }

// Name is the path in two words, such as "landing 07".
func (p Path) Name() string { return p.operation + " " + p.runway }

// BearingTrue is the direction of flight at the threshold, degrees true.
func (p Path) BearingTrue() float64 { return p.bearing }

// RunwayLength is the distance from threshold to threshold, m.
func (p Path) RunwayLength() float64 { return p.length }

// Extent is the whole path: for a landing from landing_length before the
// threshold to the far end of the runway, for a take-off from the start of
// the roll to takeoff_length beyond the far end.
func (p Path) Extent() Interval { return p.extent }

// Needed is the ground that must be observed, else the path is not-observed:
// for a landing from 2000 m before the threshold to 500 m beyond it, for a
// take-off from the start of the roll to 2000 m beyond the far end, both cut
// to the Extent.
func (p Path) Needed() Interval { return p.needed }

// Direction is the unit vector of flight in the plane. It differs from
// BearingTrue by the convergence of the meridians between threshold and
// reference point, some hundredths of a degree.
func (p Path) Direction() (east, north float64) { return p.east, p.north }

// At is the point s metres before the threshold.
func (p Path) At(s float64) (x, y float64) { return p.Beside(s, 0) }

// Beside is the point s metres before the threshold and right metres to the
// right of the path, as seen in flight.
func (p Path) Beside(s, right float64) (x, y float64) {
	x = p.threshold.X - float64(s*p.east) + float64(right*p.north)
	y = p.threshold.Y - float64(s*p.north) - float64(right*p.east)
	return x, y
}

// Along is where x, y lies: s metres before the threshold and lateral metres
// to the right of the path, as seen in flight (negative: left).
func (p Path) Along(x, y float64) (s, lateral float64) {
	dx, dy := x-p.threshold.X, y-p.threshold.Y
	s = -(float64(dx*p.east) + float64(dy*p.north))
	lateral = float64(dx*p.north) - float64(dy*p.east)
	return s, lateral
}

// GlideHeight is the height of the glide path above the threshold, in metres,
// s metres before it: crossing height + s tan(glide path), 0 from where it
// meets the runway on. A take-off has no glide path: its GlideHeight is 0.
func (p Path) GlideHeight(s float64) float64 {
	return max(0, p.crossing+float64(s*p.slope))
}
