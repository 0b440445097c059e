package config

import (
	"fmt"
	"strings"
	"time"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// maxStations is the largest number of masts; the analysis grows with its
// square and more would serve no paths within reach.
const maxStations = 200

// maxTopic is the longest topic of a mast, in bytes.
const maxTopic = 256

// Readings stay usable for three intervals, and never less than 3 s.
const (
	staleIntervals = 3
	leastStale     = 3 * time.Second
)

// windowReadings is the least number of readings that a window must have room
// for: with fewer, its mean has no spread to speak of.
const windowReadings = 3

// stations are the masts.
func (t *table) stations(analysis Analysis, out MQTT) []sensors.Station {
	all := t.tables("station")
	if _, given := t.values["station"]; !given {
		t.add(t.src.key("station"), "station", "", "add a [[station]] for each mast", "at least one station is required")
	} else if len(all) > maxStations {
		t.blame("station", "", "keep those near the paths", "%d stations, at most %d", len(all), maxStations)
		return nil
	}
	var stations []sensors.Station
	ids, topics := make(map[string]int), make(map[string]int)
	for i, st := range all {
		s := st.station(analysis, out)
		st.unique("id", s.ID, ids, i)
		st.uniqueTopics(s, topics, i)
		stations = append(stations, s)
	}
	return stations
}

// unique reports a value that an earlier station already has.
func (t *table) unique(name, value string, seen map[string]int, i int) {
	if value == "" {
		return
	}
	if first, ok := seen[value]; ok {
		at := t.src.value(fmt.Sprintf("station.%d.%s", first, name))
		t.blame(t.key(name), value, "give each station its own "+name, "two stations with one %s: the other is in line %d", name, at.line)
		return
	}
	seen[value] = i
}

// station is one mast.
func (t *table) station(analysis Analysis, out MQTT) sensors.Station {
	var s sensors.Station
	s.ID, _ = t.id("id", `"mast-1"`)
	s.Latitude, s.Longitude, _ = t.position("position")
	s.Height, _ = t.quantity("height", length(), bounds{"1 m", "150 m"}, "")
	s.Format = t.format()
	s.Topic, s.Topics = t.where(s.Format, out)
	var ok bool
	if s.Interval, ok = t.duration("interval", bounds{"50 ms", "60 s"}, ""); ok && analysis.Window > 0 && s.Interval*windowReadings > analysis.Window {
		t.blame(t.key("interval"), s.Interval.String(), "let the station report more often, or lengthen window in [analysis]",
			"a window of %v holds fewer than %d readings of this station", analysis.Window, windowReadings)
	}
	fallback := max(leastStale, staleIntervals*s.Interval)
	s.StaleAfter, ok = t.duration("stale_after", bounds{"500 ms", "3 min"}, fmt.Sprintf("%d ms", fallback.Milliseconds()))
	if ok && s.StaleAfter < s.Interval {
		t.blame(t.key("stale_after"), s.StaleAfter.String(), "make it longer than interval",
			"the station would be stale between any two readings")
	}
	north, _ := t.oneOf("north", string(sensors.NorthTrue), string(sensors.NorthTrue), string(sensors.NorthMagnetic))
	s.North = sensors.North(north)
	s.NorthOffset, _ = t.quantity("north_offset", angle(), bounds{"-180 deg", "180 deg"}, "0 deg")
	s.Fields = t.fields(s.Format, s.Topics != nil)
	t.siting(&s)
	s.CorrectClock = t.clock()
	s.Book = t.book()
	s.Maintenance = t.maintenance()
	t.done()
	return s
}

// topic is an exact topic of a station's readings.
func (t *table) topic(name string, out MQTT) string {
	topic, ok := t.text(name, "", `"airfield/skerrymoor/station/mast-1/wind"`)
	if !ok {
		return ""
	}
	message, mend := "", "write the exact topic that this station publishes to"
	switch {
	case strings.ContainsAny(topic, "+#"):
		message = "the wildcards + and # have no place here: a station has one topic"
	case strings.HasPrefix(topic, "$"):
		message = "topics that begin with $ belong to the broker"
	case len(topic) > maxTopic:
		message = fmt.Sprintf("this topic is longer than %d bytes", maxTopic)
	// Own results taken for readings would feed back for ever.
	case out.Prefix != "" && strings.HasPrefix(topic+"/", out.Prefix+"/"):
		message = "this program publishes its own results below " + out.Prefix
		mend = "let the station publish elsewhere, or set prefix in [mqtt]"
	default:
		return topic
	}
	t.blame(t.key(name), topic, mend, "%s", message)
	return ""
}

// format is how the payloads are written.
func (t *table) format() sensors.Format {
	f, _ := t.oneOf("format", "", string(sensors.FormatSenMLJSON), string(sensors.FormatSenMLCBOR),
		string(sensors.FormatNMEA0183), string(sensors.FormatJSON))
	return sensors.Format(f)
}

// fields says where a JSON payload keeps its values. Where each quantity has a
// topic of its own, a payload may be a plain number.
func (t *table) fields(format sensors.Format, apart bool) *sensors.FieldMap {
	if _, given := t.values["fields"]; !given {
		t.asked = append(t.asked, "fields")
		if format == sensors.FormatJSON && !apart {
			t.missing("fields", `{ speed = "/wind/speed", direction = "/wind/direction" }`)
		}
		return nil
	}
	f := t.table("fields", false)
	if f.absent {
		return nil
	}
	if format != "" && format != sensors.FormatJSON {
		t.add(t.src.key(f.path), f.path, "", "take fields out, or set format to json", "fields are for the format json only")
		return nil
	}
	speed, direction := `"/wind/speed"`, `"/wind/direction"`
	if apart {
		speed, direction = "", ""
	}
	m := &sensors.FieldMap{
		Samples: f.pointer("samples", ""), Speed: f.pointer("speed", speed), Direction: f.pointer("direction", direction),
		Gust: f.pointer("gust", ""), Time: f.pointer("time", ""), Exercise: f.pointer("exercise", ""),
		Toward: f.truth("toward"),
	}
	if m.Exercise == "" {
		m.Exercise = "exercise"
	}
	var ok bool
	if m.SpeedUnit, ok = f.text("speed_unit", "m/s", ""); ok {
		if _, known := quantity.SpeedUnit(m.SpeedUnit); !known {
			f.blame(f.key("speed_unit"), m.SpeedUnit, "write one of: m/s, km/h, kt, kn, mph, ft/s", "this is not a unit of speed")
		}
	}
	if m.DirectionUnit, ok = f.text("direction_unit", "deg", ""); ok {
		if _, known := quantity.AngleUnit(m.DirectionUnit); !known {
			f.blame(f.key("direction_unit"), m.DirectionUnit, "write one of: deg, rad", "this is not a unit of angle")
		}
	}
	m.TimeFormat, _ = f.oneOf("time_format", "rfc3339", "rfc3339", "unix", "unix-ms", "unix-us")
	if _, given := f.values["time_format"]; given && m.Time == "" {
		f.blame(f.key("time_format"), m.TimeFormat, "add time, the field that holds it, or take time_format out", "there is no time field that this could format")
	}
	f.samples(m, apart)
	f.done()
	return m
}

// pointer is a field of a payload: a JSON Pointer (RFC 6901) when it starts
// with "/", else a key. With an example it is required.
func (t *table) pointer(name, example string) string {
	s, ok := t.text(name, "", example)
	if !ok {
		return ""
	}
	if _, given := t.values[name]; given && s == "" {
		t.blame(t.key(name), "", "name the field, or take the line out", "this text is empty")
	}
	// RFC 6901 section 3: "~" stands only before 0 or 1.
	rest := strings.NewReplacer("~0", "", "~1", "").Replace(s)
	if strings.HasPrefix(s, "/") && strings.Contains(rest, "~") {
		t.blame(t.key(name), s, "write ~0 for a tilde and ~1 for a slash", "this is not a JSON Pointer (RFC 6901)")
		return ""
	}
	return s
}
