package config

import (
	"errors"
	"strconv"
	"strings"

	"sockline/alerting/airfield"
	"sockline/sensors"
)

// maxID is the longest id, in bytes: it becomes a level of a topic and a part
// of file names.
const maxID = 32

// maxRunways is the largest number of runways.
const maxRunways = 8

// id is a required identifier.
func (t *table) id(name, example string) (string, bool) {
	s, ok := t.text(name, "", example)
	if !ok {
		return "", false
	}
	plain := strings.Trim(s, "abcdefghijklmnopqrstuvwxyz0123456789-") == ""
	if !plain || len(s) > maxID || strings.HasPrefix(s, "-") || strings.HasSuffix(s, "-") {
		t.blame(t.key(name), s, "write something like "+example,
			"an id is a-z, 0-9 and '-' inside, at most %d characters: it is used in topics and file names", maxID)
		return "", false
	}
	return s, true
}

// airfield is the description of the aerodrome, without runways and masts.
func (t *table) airfield() airfield.Spec {
	a := t.table("airfield", true)
	var spec airfield.Spec
	spec.ID, _ = a.id("id", `"skerrymoor"`)
	spec.Name, _ = a.text("name", spec.ID, "")
	spec.Latitude, spec.Longitude, _ = a.position("position")
	spec.Elevation, _ = a.quantity("elevation", length(), bounds{"-450 m", "5500 m"}, "0 m")
	if _, given := a.values["magnetic_variation"]; given {
		if v, ok := a.quantity("magnetic_variation", angle(), bounds{"-180 deg", "180 deg"}, "0 deg"); ok {
			spec.Variation = &v
		}
	} else {
		a.asked = append(a.asked, "magnetic_variation")
	}
	if !a.absent {
		a.done()
	}
	return spec
}

// runways adds the sound runways to spec and returns their indices in the
// file.
func (t *table) runways(spec *airfield.Spec) []int {
	var indices []int
	all := t.tables("runway")
	for i, r := range all {
		before := len(t.problems)
		var runway airfield.RunwaySpec
		runway.Width, _ = r.quantity("width", length(), bounds{"3 m", "100 m"}, "30 m")
		for _, e := range r.tables("end") {
			runway.Ends = append(runway.Ends, e.end(spec.Elevation))
		}
		r.done()
		if len(t.problems) == before {
			spec.Runways = append(spec.Runways, runway)
			indices = append(indices, i)
		}
	}
	if _, given := t.values["runway"]; !given {
		t.add(t.src.key("runway"), "runway", "", "add a [[runway]] with two [[runway.end]] tables", "at least one runway is required")
	} else if len(all) > maxRunways {
		t.blame("runway", "", "keep those that are in use", "%d runways, at most %d", len(all), maxRunways)
	}
	return indices
}

// end is one runway end.
func (t *table) end(elevation float64) airfield.EndSpec {
	number := func(v float64) string { return strconv.FormatFloat(v, 'f', -1, 64) }
	var e airfield.EndSpec
	e.Designator, _ = t.text("designator", "", `"07"`)
	e.Latitude, e.Longitude, _ = t.position("threshold")
	e.Elevation, _ = t.quantity("elevation", length(), bounds{"-450 m", "5500 m"}, number(elevation)+" m")
	e.GlidePath, _ = t.quantity("glide_path", angle(), bounds{"1.5 deg", "7.5 deg"}, number(airfield.DefaultGlidePath)+" deg")
	e.CrossingHeight, _ = t.quantity("crossing_height", length(), bounds{"5 m", "40 m"}, number(airfield.DefaultCrossingHeight)+" m")
	e.LandingLength, _ = t.quantity("landing_length", length(), bounds{"500 m", "10 km"}, number(airfield.DefaultLandingLength)+" m")
	e.TakeoffLength, _ = t.quantity("takeoff_length", length(), bounds{"500 m", "10 km"}, number(airfield.DefaultTakeoffLength)+" m")
	t.done()
	return e
}

// geometry makes the airfield. Its faults become problems at the places that
// they speak of. What has problems already is left out of the question.
func (r *reader) geometry(spec airfield.Spec, runways []int, stations []sensors.Station) *airfield.Airfield {
	var masts []int
	for _, p := range r.problems {
		if p.Key == "airfield" || strings.HasPrefix(p.Key, "airfield.position") {
			return nil
		}
	}
	for i, s := range stations {
		if !r.blamed("station." + strconv.Itoa(i) + ".position") {
			spec.Masts = append(spec.Masts, airfield.MastSpec{ID: s.ID, Latitude: s.Latitude, Longitude: s.Longitude, Height: s.Height})
			masts = append(masts, i)
		}
	}
	field, err := airfield.New(spec)
	var faults airfield.Faults
	if !errors.As(err, &faults) {
		return field
	}
	for _, f := range faults {
		if f.Field == "runway" {
			continue // reported where runways are read
		}
		path := f.Field
		path = renumber(path, "runway.", runways)
		path = renumber(path, "station.", masts)
		r.blame(path, f.Value, f.Mend, "%s", renumber(f.Message, "runway.", runways))
	}
	return nil
}

// blamed tells whether there is a problem with path or something within it.
func (r *reader) blamed(path string) bool {
	for _, p := range r.problems {
		if p.Key == path || strings.HasPrefix(p.Key, path+".") {
			return true
		}
	}
	return false
}

// renumber turns the index that follows prefix in s from one among the sound
// into one among all.
func renumber(s, prefix string, all []int) string {
	at := strings.Index(s, prefix)
	if at < 0 {
		return s
	}
	rest := s[at+len(prefix):]
	digits := len(rest) - len(strings.TrimLeft(rest, "0123456789"))
	k, err := strconv.Atoi(rest[:digits])
	if err != nil || k >= len(all) {
		return s
	}
	return s[:at] + prefix + strconv.Itoa(all[k]) + rest[digits:]
}
