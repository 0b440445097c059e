package airfield

import (
	"errors"
	"fmt"
	"math"
	"strconv"
	"strings"

	"sockline/sensors/quantity"
)

// Bounds of what an aerodrome can be.
const (
	minRunway      = 200.0   // m, threshold to threshold
	maxRunway      = 6000.0  // m
	maxThreshold   = 10000.0 // m from the reference point
	maxMast        = 15000.0 // m from the reference point: farther off says nothing of these paths
	maxDesignator  = 15.0    // degrees between a painted number and the magnetic bearing
	maxPathAdvance = 20000.0 // m of a landing or take-off path outside the runway
)

// Fault is one statement of a Spec that cannot be true.
type Fault struct {
	Field   string // as in a configuration, such as "runway.0.end.1.designator"
	Value   string // what it says, as the configuration would write it; may be empty
	Message string
	Mend    string
}

func (f Fault) Error() string {
	s := f.Field + ": " + f.Message
	if f.Value != "" {
		s += fmt.Sprintf(" (got %q)", f.Value)
	}
	return s + "; " + f.Mend
}

// Faults is every Fault of a Spec, as an error.
type Faults []Fault

func (fs Faults) Error() string {
	errs := make([]error, len(fs))
	for i, f := range fs {
		errs[i] = f
	}
	return errors.Join(errs...).Error()
}

func (fs *Faults) add(field, value, mend, format string, args ...any) {
	*fs = append(*fs, Fault{Field: field, Value: value, Message: fmt.Sprintf(format, args...), Mend: mend})
}

// examine looks for whatever would make the geometry of a Spec wrong or
// meaningless.
func examine(spec Spec) Faults {
	var fs Faults
	if !fs.position("airfield.position", spec.Latitude, spec.Longitude) {
		return fs // every distance below hangs on it
	}
	if len(spec.Runways) == 0 {
		fs.add("runway", "", "describe a runway with two [[runway.end]] tables", "no runway")
	}
	seen := make(map[string]string)
	for i, r := range spec.Runways {
		field := fmt.Sprintf("runway.%d", i)
		if len(r.Ends) != 2 {
			fs.add(field, "", "give it two [[runway.end]] tables, one for each landing direction",
				"a runway has two ends, this one has %d", len(r.Ends))
			continue
		}
		sound := true
		for k, e := range r.Ends {
			sound = fs.end(spec, fmt.Sprintf("%s.end.%d", field, k), e, seen) && sound
		}
		if sound {
			fs.runway(spec, field, r)
		}
	}
	for i, m := range spec.Masts {
		field := fmt.Sprintf("station.%d.position", i)
		if fs.position(field, m.Latitude, m.Longitude) {
			fs.near(spec, field, m.Latitude, m.Longitude, maxMast)
		}
	}
	return fs
}

// end examines one runway end by itself.
func (fs *Faults) end(spec Spec, field string, e EndSpec, seen map[string]string) bool {
	before := len(*fs)
	if _, _, ok := splitDesignator(e.Designator); !ok {
		fs.add(field+".designator", e.Designator, `write it as painted, such as "07" or "25L"`,
			"a designator is 01 to 36, with L, C or R where runways are parallel")
	} else if other, ok := seen[e.Designator]; ok {
		fs.add(field+".designator", e.Designator, "give each runway end its own designator",
			"this designator is already that of %s", other)
	}
	seen[e.Designator] = field
	if fs.position(field+".threshold", e.Latitude, e.Longitude) {
		fs.near(spec, field+".threshold", e.Latitude, e.Longitude, maxThreshold)
	}
	for _, c := range []struct {
		name      string
		value     float64
		low, high float64
	}{
		{"landing_length", e.LandingLength, 1, maxPathAdvance}, {"takeoff_length", e.TakeoffLength, 1, maxPathAdvance},
		{"glide_path", e.GlidePath, 0.1, 45}, {"crossing_height", e.CrossingHeight, 0, 100},
	} {
		if !(c.value >= c.low && c.value <= c.high) {
			fs.add(field+"."+c.name, strconv.FormatFloat(c.value, 'g', -1, 64), "correct it or leave it out for the default",
				"must be from %g to %g", c.low, c.high)
		}
	}
	return len(*fs) == before
}

// runway examines two sound ends against each other.
func (fs *Faults) runway(spec Spec, field string, r RunwaySpec) {
	a, b := r.Ends[0], r.Ends[1]
	bearing, length := Azimuth(a.Latitude, a.Longitude, b.Latitude, b.Longitude, spec.Elevation)
	if length < minRunway || length > maxRunway {
		fs.add(field+".end.1.threshold", pair(b.Latitude, b.Longitude), "check both thresholds",
			"the thresholds of %s and %s are %.0f m apart, a runway is %.0f to %.0f m long",
			a.Designator, b.Designator, length, minRunway, maxRunway)
		return
	}
	numA, sideA, _ := splitDesignator(a.Designator)
	numB, sideB, _ := splitDesignator(b.Designator)
	if (numA+17)%36+1 != numB || opposite(sideA) != sideB {
		fs.add(field+".end.1.designator", b.Designator, fmt.Sprintf("the other end of %s is %02d%s",
			a.Designator, (numA+17)%36+1, opposite(sideA)),
			"the designators of the two ends of a runway are 18 apart, with L and R exchanged")
		return
	}
	variation := 0.0
	if spec.Variation != nil {
		variation = *spec.Variation
	} else if v, err := declination(spec.Latitude, spec.Longitude, spec.Elevation, (wmmEpoch+wmmEnd)/2); err == nil {
		// No clock here: the middle of the model's years. The variation moves
		// by less than half a degree a year outside the polar regions.
		variation = v
	}
	magnetic := quantity.NormalizeDegrees(bearing - variation)
	for k, num := range []int{numA, numB} {
		off := turn(magnetic+float64(180*k), float64(10*float64(num)))
		if off <= maxDesignator {
			continue
		}
		mend := "check the designator, the thresholds, and magnetic_variation if it is set"
		if off > 180-maxDesignator {
			mend = "the two thresholds seem to be exchanged"
		}
		fs.add(fmt.Sprintf("%s.end.%d.designator", field, k), r.Ends[k].Designator, mend,
			"the bearing from this threshold is %03.0f magnetic (%03.0f true, variation %.1f), %.0f degrees from the designator",
			math.Mod(magnetic+float64(180*k), 360), math.Mod(bearing+float64(180*k), 360), variation, off)
	}
}

// position examines a latitude and longitude.
func (fs *Faults) position(field string, lat, lon float64) bool {
	if math.Abs(lat) <= 89 && math.Abs(lon) <= 180 {
		return true
	}
	fs.add(field, pair(lat, lon), "write [latitude, longitude] in degrees, south and west negative",
		"latitude must be from -89 to 89, longitude from -180 to 180")
	return false
}

// near examines whether a place is within limit metres of the reference point.
func (fs *Faults) near(spec Spec, field string, lat, lon, limit float64) {
	dist := distance(spec, lat, lon)
	if dist <= limit {
		return
	}
	mend := "check the position; south and west are negative"
	if math.Abs(lon) <= 89 && distance(spec, lon, lat) <= limit {
		mend = "latitude and longitude seem to be exchanged"
	}
	fs.add(field, pair(lat, lon), mend, "%.1f km from the reference point, more than %.0f km", dist/1000, limit/1000)
}

// distance is the straight line from the reference point, m: unlike the
// distance in the tangent plane it grows all the way round the earth.
func distance(spec Spec, lat, lon float64) float64 {
	x, y, z := NewPlane(spec.Latitude, spec.Longitude, spec.Elevation).EastNorthUp(lat, lon, spec.Elevation)
	return math.Hypot(math.Hypot(x, y), z)
}

func pair(lat, lon float64) string {
	return "[" + strconv.FormatFloat(lat, 'f', -1, 64) + ", " + strconv.FormatFloat(lon, 'f', -1, 64) + "]"
}

// splitDesignator is the number (1 to 36) and the side (L, C, R or nothing) of
// a runway designator.
func splitDesignator(d string) (number int, side string, ok bool) {
	if len(d) < 2 || len(d) > 3 || strings.Trim(d[:2], "0123456789") != "" {
		return 0, "", false
	}
	number, side = int(d[0]-'0')*10+int(d[1]-'0'), d[2:]
	return number, side, number >= 1 && number <= 36 && strings.Contains("LCR", side)
}

// opposite is the side of the other end of the same runway.
func opposite(side string) string {
	switch side {
	case "L":
		return "R"
	case "R":
		return "L"
	}
	return side
}

// turn is the angle between two directions in degrees, 0 to 180.
func turn(a, b float64) float64 {
	d := quantity.NormalizeDegrees(a - b)
	return min(d, 360-d)
}
