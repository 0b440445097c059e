package airfield

import (
	"math"

	"sockline/sensors/quantity"
)

// The WGS-84 ellipsoid (NIMA TR8350.2, 2000, table 3.1; from memory).
const (
	wgs84A  = 6378137.0             // semi-major axis, m
	wgs84F  = 1 / 298.257223563     // flattening
	wgs84E2 = wgs84F * (2 - wgs84F) // first eccentricity squared
)

const degree = math.Pi / 180

// Plane is the tangent plane of the ellipsoid at an origin: x east, y north,
// z up, in metres. The zero Plane is not usable; make one with NewPlane.
type Plane struct {
	origin         [3]float64 // of the plane, earth-centred
	sinLat, cosLat float64
	sinLon, cosLon float64
}

// NewPlane is the plane tangent at lat, lon (WGS-84 degrees) and height
// (metres above the ellipsoid). An elevation above sea level serves as the
// height: the geoid lies within 110 m of the ellipsoid, which changes a
// distance of 10 km by less than 0.2 m.
func NewPlane(lat, lon, height float64) Plane {
	p := Plane{origin: earthCentred(lat, lon, height)}
	p.sinLat, p.cosLat = math.Sincos(lat * degree)
	p.sinLon, p.cosLon = math.Sincos(lon * degree)
	return p
}

// EastNorthUp is where lat, lon (WGS-84 degrees) and height (metres) lie in
// the plane. Up falls away with the curvature of the earth, about 7.8 m at
// 10 km.
//
//	ENU = R (P - O), R rows (-sin lo, cos lo, 0),
//	(-sin la cos lo, -sin la sin lo, cos la), (cos la cos lo, cos la sin lo, sin la)
//
// with la, lo of the origin: the textbook topocentric rotation.
func (p Plane) EastNorthUp(lat, lon, height float64) (east, north, up float64) {
	q := earthCentred(lat, lon, height)
	dx, dy, dz := q[0]-p.origin[0], q[1]-p.origin[1], q[2]-p.origin[2]
	// Conversions to float64 forbid fused multiply-add, so that every machine
	// finds the same metre.
	out := float64(p.cosLon*dx) + float64(p.sinLon*dy) // away from the axis
	east = float64(p.cosLon*dy) - float64(p.sinLon*dx)
	north = float64(p.cosLat*dz) - float64(p.sinLat*out)
	up = float64(p.cosLat*out) + float64(p.sinLat*dz)
	return east, north, up
}

// planeRounds is how often LatLon corrects its guess. The error shrinks by the
// share that the plane differs from the ellipsoid, a thousandth at 10 km, so
// four rounds reach the last digit.
const planeRounds = 4

// LatLon is the inverse of EastNorthUp: the latitude and longitude (WGS-84
// degrees) that lie east and north (metres) in the plane at the given height
// above the ellipsoid. It is for ground near the origin, up to some 100 km, and
// away from the poles.
//
// Each round moves the guess by what EastNorthUp is off, through the radii of
// curvature M = a(1-e2)/(1-e2 sin2 la)^(3/2) and N = a/(1-e2 sin2 la)^(1/2) of
// the origin (textbook geodesy).
func (p Plane) LatLon(east, north, height float64) (lat, lon float64) {
	w := 1 - float64(float64(wgs84E2*p.sinLat)*p.sinLat)
	meridian := wgs84A * (1 - wgs84E2) / (w * math.Sqrt(w))
	parallel := float64(wgs84A / math.Sqrt(w) * p.cosLat)
	lat = math.Atan2(p.sinLat, p.cosLat) / degree
	lon = math.Atan2(p.sinLon, p.cosLon) / degree
	for range planeRounds {
		e, n, _ := p.EastNorthUp(lat, lon, height)
		lat += float64((north - n) / (meridian + height) / degree)
		lon += float64((east - e) / (parallel + float64(height*p.cosLat)) / degree)
	}
	return lat, math.Remainder(lon, 360)
}

// earthCentred is the earth-centred, earth-fixed position in metres.
//
//	N = a / sqrt(1 - e2 sin2 la)
//	X = (N+h) cos la cos lo, Y = (N+h) cos la sin lo, Z = (N(1-e2)+h) sin la
func earthCentred(lat, lon, height float64) [3]float64 {
	sinLat, cosLat := math.Sincos(lat * degree)
	sinLon, cosLon := math.Sincos(lon * degree)
	n := wgs84A / math.Sqrt(1-float64(float64(wgs84E2*sinLat)*sinLat))
	out := (n + height) * cosLat
	return [3]float64{out * cosLon, out * sinLon, (float64(n*(1-wgs84E2)) + height) * sinLat}
}

// Azimuth is the direction from A to B at A, in degrees true [0, 360), and
// the distance in plan, in metres, both at the given height above the
// ellipsoid. Up to 10 km the direction differs from that of the geodesic by
// less than 1e-4 degree.
func Azimuth(latA, lonA, latB, lonB, height float64) (deg, distance float64) {
	east, north, _ := NewPlane(latA, lonA, height).EastNorthUp(latB, lonB, height)
	return quantity.NormalizeDegrees(math.Atan2(east, north) / degree), math.Hypot(east, north)
}
