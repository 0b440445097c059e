// Package sensors is what the wind instruments say, made trustworthy: a
// message from the broker becomes a reading (decode), a checked reading
// (quality) and the averages of each mast (averages). It never imports
// alerting.
//
// This root package holds the values that the stages share.
package sensors

import "time"

// Instant is a moment in whole milliseconds since the Unix epoch, UTC.
type Instant int64

// Second is one second as a step of an Instant.
const Second Instant = 1000

// instantLayout is RFC 3339 in UTC with milliseconds.
const instantLayout = "2006-01-02T15:04:05.000Z"

// At is the instant of t, cut to the millisecond.
func At(t time.Time) Instant { return Instant(t.UnixMilli()) }

// Time is the instant as a time in UTC.
func (i Instant) Time() time.Time { return time.UnixMilli(int64(i)).UTC() }

// Add moves the instant by d, cut to the millisecond.
func (i Instant) Add(d time.Duration) Instant { return i + Instant(d.Milliseconds()) }

// Sub is the time from j to i.
func (i Instant) Sub(j Instant) time.Duration { return time.Duration(i-j) * time.Millisecond }

// FloorSecond is the last whole second at or before i.
func (i Instant) FloorSecond() Instant { return i - ((i%Second)+Second)%Second }

// CeilSecond is the first whole second at or after i: the step that a reading
// with this event time belongs to.
func (i Instant) CeilSecond() Instant { return (i + Second - 1).FloorSecond() }

// String is RFC 3339 in UTC with milliseconds.
func (i Instant) String() string { return i.Time().Format(instantLayout) }

// Format says how the payloads of a station are written.
type Format string

// The payload formats.
const (
	FormatSenMLJSON Format = "senml+json"
	FormatSenMLCBOR Format = "senml+cbor"
	FormatNMEA0183  Format = "nmea0183"
	FormatJSON      Format = "json"
)

// North says what a station's directions are counted from.
type North string

// The references of direction.
const (
	NorthTrue     North = "true"
	NorthMagnetic North = "magnetic"
)

// Station is one configured mast.
type Station struct {
	ID          string
	Latitude    float64       // WGS-84 degrees
	Longitude   float64       // WGS-84 degrees
	Height      float64       // of the anemometer above the ground, m
	Topic       string        // exact MQTT topic, no wildcards; with Topics that of the speed
	Format      Format        // how its payloads are written
	Interval    time.Duration // how often it reports
	StaleAfter  time.Duration // without a reading for so long, it is stale
	North       North         // what its directions are counted from
	NorthOffset float64       // degrees added to its directions (a misaligned mast)
	Fields      *FieldMap     // for FormatJSON, nil otherwise; optional with Topics
	Topics      *FieldTopics  // for FormatJSON: a topic for each quantity; nil: one for all

	// Roughness of the ground around the mast, by the direction that the wind
	// comes from, in clockwise order and all round. Empty: speeds are used as
	// they are measured.
	Roughness []RoughnessSector
	// Exposure also brings the speed from that ground to open ground; without
	// it only the height is corrected for.
	Exposure bool

	CorrectClock bool // take the constant error of its clock out, not only name it
	Book         Book
	Maintenance  []Maintenance // in order of time, not overlapping
}

// Book is what is known of the instrument of a station: for people, nothing is
// worked out from it. Dates are written 2026-07-01 and empty if not known.
type Book struct {
	Model, Serial                  string
	Installed, Calibrated, NextDue string
	Notes                          string
}

// Maintenance is a time in which a station is worked on: its readings are kept
// and say nothing of the wind. From belongs to it, To does not.
type Maintenance struct {
	From, To Instant
	Reason   string
}

// UnderMaintenance is the maintenance that a station is under at an instant;
// false if none.
func (s *Station) UnderMaintenance(at Instant) (Maintenance, bool) {
	for _, m := range s.Maintenance {
		if m.From <= at && at < m.To {
			return m, true
		}
	}
	return Maintenance{}, false
}

// RoughnessSector is the ground upwind of a mast in one sector.
type RoughnessSector struct {
	From, To float64 // degrees true, clockwise from From to To; equal: all round
	Length   float64 // roughness length z0, m
}

// FieldTopics are the exact topics of a station that publishes each quantity by
// itself, as a plain number or as JSON.
type FieldTopics struct {
	Speed     string
	Direction string
	Gust      string // optional
}

// AllTopics lists every topic of the station, its Topic first.
func (s Station) AllTopics() []string {
	if s.Topics == nil {
		return []string{s.Topic}
	}
	all := []string{s.Topics.Speed, s.Topics.Direction}
	if s.Topics.Gust != "" {
		all = append(all, s.Topics.Gust)
	}
	return all
}

// FieldMap says where a mapped JSON payload keeps its values. A name is a
// JSON Pointer (RFC 6901) when it starts with "/", else a key of the top
// object. Units are spelled as in the configuration ("m/s", "kt", "km/h",
// "mph", "ft/s"; "deg", "rad").
type FieldMap struct {
	// Samples is the place of an array of measurements; the names of the
	// others are then relative to each of its elements. Optional.
	Samples       string
	Speed         string // with FieldTopics optional: a payload is then a plain number
	Direction     string // the same
	Gust          string // optional
	Time          string // optional
	Exercise      string // optional; a boolean marking synthetic data. Default "exercise"
	SpeedUnit     string // default "m/s"
	DirectionUnit string // default "deg"
	Toward        bool   // directions say where the wind goes
	TimeFormat    string // "rfc3339" (default), "unix", "unix-ms", "unix-us"
}

// Message is one MQTT message as the program saw it, stamped once on arrival.
type Message struct {
	Topic    string
	Payload  []byte
	Received Instant
	Retained bool
}

// Reading is one wind measurement of one station, as decoded: SI units,
// direction from true north, where the wind comes from.
type Reading struct {
	Station  int     // index into the configured stations
	Time     Instant // when it was measured; the arrival stamp where the payload has no time
	Arrival  Instant // the stamp of the message
	Speed    float64 // m/s
	From     float64 // degrees true [0, 360)
	Gust     float64 // m/s, meaningful only if HasGust
	HasGust  bool
	Exercise bool // the payload marks itself as synthetic
	Retained bool // it came from a retained message
}
