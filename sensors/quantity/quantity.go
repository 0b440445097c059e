// Package quantity holds the physical quantities that sockline speaks of.
//
// Inside the program every quantity is a float64 in SI units (metres, metres
// a second, degrees true). Knots, feet, nautical miles, miles an hour and the
// rest exist only in the parsers and formatters of this package.
package quantity

import "math"

// Conversion factors to SI. Knot: the international nautical mile is 1852 m
// exactly (First International Extraordinary Hydrographic Conference, 1929).
// Foot and mile: exact by the international yard and pound agreement, 1959.
const (
	Knot             = 1852.0 / 3600.0 // m/s
	Foot             = 0.3048          // m
	NauticalMile     = 1852.0          // m
	KilometrePerHour = 1.0 / 3.6       // m/s
	MilePerHour      = 0.44704         // m/s
	FootPerSecond    = Foot            // m/s

	// KnotPer1000Foot is the trade's unit of horizontal shear, in 1/s.
	KnotPer1000Foot = Knot / (1000 * Foot)
	// KnotPer100Foot is the trade's unit of vertical shear, in 1/s.
	KnotPer100Foot = Knot / (100 * Foot)

	// StandardGravity in m/s2 (3rd CGPM, 1901).
	StandardGravity = 9.80665
)

// Vector is a horizontal wind vector in m/s: the velocity of the air, so that
// a west wind has a positive East component.
type Vector struct{ East, North float64 }

// FromDirection makes the vector of a wind of speed (m/s) that comes from the
// direction from (degrees true). It is the only place where a meteorological
// direction becomes a vector: u = -S sin DD, v = -S cos DD.
func FromDirection(speed, from float64) Vector {
	sin, cos := math.Sincos(from * (math.Pi / 180))
	return Vector{East: -float64(speed * sin), North: -float64(speed * cos)}
}

// Speed is the magnitude in m/s.
func (v Vector) Speed() float64 { return math.Hypot(v.East, v.North) }

// From is the direction the wind comes from, in degrees true [0, 360). The
// direction of a zero vector is 0.
func (v Vector) From() float64 {
	if v.East == 0 && v.North == 0 {
		return 0
	}
	return NormalizeDegrees(math.Atan2(-v.East, -v.North) * (180 / math.Pi))
}

// Headwind is the component against a flight along bearing (degrees true), in
// m/s: positive is a headwind, negative a tailwind.
func (v Vector) Headwind(bearing float64) float64 {
	sin, cos := math.Sincos(bearing * (math.Pi / 180))
	return -(float64(v.East*sin) + float64(v.North*cos))
}

// CrosswindFromRight is the component across a flight along bearing (degrees
// true), in m/s: positive when the wind comes from the right.
func (v Vector) CrosswindFromRight(bearing float64) float64 {
	sin, cos := math.Sincos(bearing * (math.Pi / 180))
	return -(float64(v.East*cos) - float64(v.North*sin))
}

// NormalizeDegrees brings an angle into [0, 360).
func NormalizeDegrees(deg float64) float64 {
	deg = math.Mod(deg, 360)
	if deg < 0 {
		deg += 360
	}
	if deg >= 360 { // -1e-20 mod 360 rounds up to 360
		deg = 0
	}
	return deg
}
