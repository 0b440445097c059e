package airfield

import (
	"math"
	"time"
)

// Defaults of a runway end: a 3 degree glide path that crosses the threshold
// at 15 m (50 ft, ICAO Annex 10 and Doc 8168; from memory) is 277 m up at
// 5 km, beyond what a 10 m mast says much about.
const (
	DefaultGlidePath      = 3.0    // degrees
	DefaultCrossingHeight = 15.0   // m
	DefaultLandingLength  = 5000.0 // m
	DefaultTakeoffLength  = 5000.0 // m
)

// Spec is a plain description of an aerodrome, as a configuration gives it.
// Positions are WGS-84 degrees, elevations and lengths metres, all defaults
// filled in.
type Spec struct {
	ID, Name            string
	Latitude, Longitude float64 // of the reference point
	Elevation           float64
	Variation           *float64 // fixed magnetic variation, degrees east; nil: the magnetic model
	Runways             []RunwaySpec
	Masts               []MastSpec
}

// RunwaySpec describes a runway. It has exactly two ends.
type RunwaySpec struct {
	Width float64
	Ends  []EndSpec
}

// EndSpec describes a runway end.
type EndSpec struct {
	Designator          string
	Latitude, Longitude float64 // of the threshold
	Elevation           float64
	GlidePath           float64 // degrees
	CrossingHeight      float64 // of the glide path above the threshold
	LandingLength       float64 // how far before the threshold the landing path is looked at
	TakeoffLength       float64 // how far beyond the far end the take-off path is looked at
}

// MastSpec describes where a mast stands.
type MastSpec struct {
	ID                  string
	Latitude, Longitude float64
	Height              float64 // of the anemometer above the ground
}

// Airfield is the geometry of an aerodrome. It does not change once made.
type Airfield struct {
	ID, Name            string
	Latitude, Longitude float64 // of the reference point, WGS-84 degrees
	Elevation           float64 // m
	Runways             []Runway
	Paths               []Path // for each runway end in configured order: landing, take-off
	Masts               []Mast // in configured order

	plane     Plane
	variation *float64
}

// Runway is a runway in the plane.
type Runway struct {
	Width  float64 // m
	Length float64 // from threshold to threshold, m
	Ends   [2]End
}

// End is a runway end.
type End struct {
	Designator     string
	Threshold      Point
	Elevation      float64 // m
	Bearing        float64 // direction of flight at the threshold, degrees true
	GlidePath      float64 // degrees
	CrossingHeight float64 // m
	LandingLength  float64 // m
	TakeoffLength  float64 // m
}

// Mast is a mast in the plane.
type Mast struct {
	Point
	ID     string
	Height float64 // of the anemometer above the ground, m
}

// New works out the geometry of an aerodrome. Its error is a Faults: every
// statement of the Spec that cannot be true, with its field.
func New(spec Spec) (*Airfield, error) {
	if faults := examine(spec); len(faults) > 0 {
		return nil, faults
	}
	a := &Airfield{
		ID: spec.ID, Name: spec.Name, Latitude: spec.Latitude, Longitude: spec.Longitude,
		Elevation: spec.Elevation, plane: NewPlane(spec.Latitude, spec.Longitude, spec.Elevation),
	}
	if spec.Variation != nil {
		v := *spec.Variation
		a.variation = &v
	}
	for _, r := range spec.Runways {
		ends := [2]End{a.end(r.Ends[0], r.Ends[1]), a.end(r.Ends[1], r.Ends[0])}
		from, to := ends[0].Threshold, ends[1].Threshold
		a.Runways = append(a.Runways, Runway{
			Width: r.Width, Ends: ends, Length: math.Hypot(to.X-from.X, to.Y-from.Y),
		})
		for i := range ends {
			a.Paths = append(a.Paths, newPath(ends[i], ends[1-i], Landing), newPath(ends[i], ends[1-i], TakeOff))
		}
	}
	for _, m := range spec.Masts {
		a.Masts = append(a.Masts, Mast{ID: m.ID, Height: m.Height, Point: a.Locate(m.Latitude, m.Longitude)})
	}
	return a, nil
}

// end is the runway end of from, whose runway leads to the threshold of to.
func (a *Airfield) end(from, to EndSpec) End {
	bearing, _ := Azimuth(from.Latitude, from.Longitude, to.Latitude, to.Longitude, a.Elevation)
	return End{
		Designator: from.Designator, Threshold: a.Locate(from.Latitude, from.Longitude),
		Elevation: from.Elevation, Bearing: bearing, GlidePath: from.GlidePath,
		CrossingHeight: from.CrossingHeight, LandingLength: from.LandingLength, TakeoffLength: from.TakeoffLength,
	}
}

// Locate is where lat, lon (WGS-84 degrees) lies in the airfield's plane, at
// the elevation of the airfield: a mast 50 m higher or lower moves by 5 cm at
// 6 km.
func (a *Airfield) Locate(lat, lon float64) Point {
	x, y, _ := a.plane.EastNorthUp(lat, lon, a.Elevation)
	return Point{X: x, Y: y}
}

// LatLon is where a point of the airfield's plane lies, in WGS-84 degrees: the
// inverse of Locate.
func (a *Airfield) LatLon(p Point) (lat, lon float64) { return a.plane.LatLon(p.X, p.Y, a.Elevation) }

// Variation is the magnetic variation on the UTC date of t, degrees, east
// positive: the configured one, else that of the magnetic model rounded to
// 0.1 degree. It fails where the model does and none is configured.
func (a *Airfield) Variation(t time.Time) (deg float64, err error) {
	if a.variation != nil {
		return *a.variation, nil
	}
	return RoundedVariation(a.Latitude, a.Longitude, a.Elevation, t)
}

// Path is the path of an operation on a runway end; false if there is none.
func (a *Airfield) Path(runway, operation string) (Path, bool) {
	for _, p := range a.Paths {
		if p.runway == runway && p.operation == operation {
			return p, true
		}
	}
	return Path{}, false
}

// MastPoints is where the masts stand, in configured order.
func (a *Airfield) MastPoints() []Point {
	points := make([]Point, len(a.Masts))
	for i, m := range a.Masts {
		points[i] = m.Point
	}
	return points
}
