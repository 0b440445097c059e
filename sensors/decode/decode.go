// Package decode turns one message from a mast into wind readings, and says
// of everything it refuses why. It is pure: the same bytes give the same
// readings, and it reads no clock.
//
// These payload formats are known.
//
// SenML (RFC 8428) in JSON or CBOR: records whose resolved name ends in "wind_speed"
// (m/s, km/h, kt, kn, mph, ft/s), "wind_direction" (deg or rad, where the wind
// comes from) and, if there is one, "wind_gust". Speed and direction belong
// together when what precedes those endings and the time are the same. A
// boolean record whose name ends in "exercise" marks the whole pack as
// synthetic. A pack whose names are those of another station is refused.
//
// NMEA 0183: MWV, MWD, MDA and XDR sentences, one or more a message, each with
// its checksum; other sentences are passed over. The angle of MWV, R or T, and
// of XDR is counted from the zero of the instrument, which is the north of the
// station's configuration. Of XDR the angles (type A, in degrees) and the speeds
// (type S, in M, N, K or S) of one message belong together: transducers named
// 0, 1 and 2 are the least, mean and greatest value, those whose name begins
// with WIND speak for themselves, and others are passed over. The proprietary sentence "$PSKLX,1*41" is sockline's own: it
// marks every reading of its message as synthetic; "$PSKLX,0*40" says that
// they are real.
//
// JSON with a field map: see sensors.FieldMap. Numbers may be written as
// strings. One message may hold an array of samples, or each quantity may come
// on a topic of its own; then a speed and a direction whose arrival stamps lie
// within JoinWithin make a reading.
//
// A wind that is not there is never read as calm: an empty field, a null or a
// status that says "not valid" gives no reading. What comes out goes to
// package quality.
package decode

import (
	"fmt"
	"math"

	"github.com/fxamacker/cbor/v2"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

const (
	// MaxPayload is the longest payload that is looked at, in bytes: hundreds
	// of readings fit, and a flood of garbage costs little.
	MaxPayload = 64 << 10
	// MaxDepth is how deep JSON and CBOR may nest; real payloads use four levels.
	MaxDepth = 32
	// MaxReadings is the most readings that one message may hold: a minute of
	// ten a second with room to spare.
	MaxReadings = 1000
	// MaxSpeed is the largest speed, in m/s, that is taken for a wind at all.
	// It only keeps broken encodings out; package quality has the physical
	// limit.
	MaxSpeed = 1000
)

// Decoder decodes the messages of one station. It holds scratch space, so that
// decoding allocates nothing once warm; one goroutine may use it at a time.
type Decoder struct {
	station sensors.Station
	index   int
	others  map[string]string // ids of the other stations, by themselves

	mapping mapping      // for FormatJSON
	joiner  joiner       // for FormatJSON with a topic for each quantity
	cbor    cbor.DecMode // for FormatSenMLCBOR

	// Of the message at hand; kept for their capacity.
	faults Rejections
	pack   pack
	names  []byte  // resolved SenML names
	groups []group // SenML records that belong together
	xdr    transducers
	text   []byte // an unescaped JSON string
}

// New makes the decoder of a station; index is what its readings carry as
// Station. The error names what the configuration of the station lacks.
func New(station sensors.Station, index int) (*Decoder, error) {
	d := &Decoder{station: station, index: index}
	if station.Topics != nil && station.Format != sensors.FormatJSON {
		return nil, fmt.Errorf("station %q: format %q on a topic for each quantity is not known; expected %q",
			station.ID, station.Format, sensors.FormatJSON)
	}
	var err error
	switch station.Format {
	case sensors.FormatSenMLJSON, sensors.FormatNMEA0183:
	case sensors.FormatSenMLCBOR:
		if d.cbor, err = newCBOR(); err != nil {
			return nil, fmt.Errorf("station %q: prepare for CBOR: %w", station.ID, err)
		}
	case sensors.FormatJSON:
		if d.mapping, err = compile(station.Fields, station.Topics); err != nil {
			return nil, fmt.Errorf("station %q: fields: %w", station.ID, err)
		}
		d.joiner = newJoiner(station.Topics)
	default:
		return nil, fmt.Errorf("station %q: format %q is not known; expected %q, %q, %q or %q", station.ID, station.Format,
			sensors.FormatSenMLJSON, sensors.FormatSenMLCBOR, sensors.FormatNMEA0183, sensors.FormatJSON)
	}
	return d, nil
}

// Beware tells the decoder the ids of all stations, so that a payload that
// names another one is refused: a mast that was given the wrong name would
// otherwise put its wind at the wrong place.
func (d *Decoder) Beware(ids []string) {
	d.others = make(map[string]string, len(ids))
	for _, id := range ids {
		if id != d.station.ID {
			d.others[id] = id
		}
	}
}

// Decode appends the readings of m to dst. variationDeg is the magnetic
// variation at the station, in degrees, east positive.
//
// The error is nil or Rejections: what was refused, or well-formed but without
// a value, while the good parts of the same payload still come out. No reading
// and no error means that the payload is in order and speaks of other things.
func (d *Decoder) Decode(dst []sensors.Reading, m sensors.Message, variationDeg float64) ([]sensors.Reading, error) {
	d.faults = nil // the previous list belongs to its caller
	if len(m.Payload) > MaxPayload {
		d.refuse(TooLarge, "%d bytes; at most %d are looked at", len(m.Payload), MaxPayload)
		return dst, d.faults
	}
	var exercise bool
	first := len(dst)
	switch d.station.Format {
	case sensors.FormatSenMLJSON, sensors.FormatSenMLCBOR:
		dst, exercise = d.senML(dst, m, variationDeg)
	case sensors.FormatNMEA0183:
		dst, exercise = d.nmea(dst, m, variationDeg)
	case sensors.FormatJSON:
		if d.station.Topics != nil {
			dst = d.part(dst, m, variationDeg)
		} else {
			dst, exercise = d.mapped(dst, m, variationDeg)
		}
	}
	if exercise {
		for i := first; i < len(dst); i++ {
			dst[i].Exercise = true
		}
	}
	if len(d.faults) == 0 {
		return dst, nil // not a nil Rejections in a non-nil error
	}
	return dst, d.faults
}

// wind is one measurement before it is a reading: speeds in m/s, the direction
// in degrees as the payload counts it.
type wind struct {
	at        sensors.Instant
	speed     float64
	direction float64
	gust      float64
	hasGust   bool
	north     sensors.North // what the payload says that it counts from; else empty
}

// reading turns w to true north. ok is false if the direction that comes out
// is no number, which only a variation or offset that is none can cause: NaN
// stands for a variation that is not known.
func (d *Decoder) reading(w wind, m sensors.Message, variationDeg float64) (r sensors.Reading, ok bool) {
	from := w.direction + d.station.NorthOffset
	north := w.north
	if north == "" {
		north = d.station.North
	}
	if north == sensors.NorthMagnetic {
		from += variationDeg
	}
	from = quantity.NormalizeDegrees(from)
	if math.IsNaN(variationDeg) && math.IsNaN(from) {
		d.refuse(NotFinite, "the direction is counted from magnetic north, and the variation is not known here")
		return r, false
	}
	if math.IsNaN(from) {
		d.refuse(NotFinite, "the direction is no number once turned to true north (variation %v, offset %v)",
			variationDeg, d.station.NorthOffset)
		return r, false
	}
	return sensors.Reading{
		Station:  d.index,
		Time:     w.at,
		Arrival:  m.Received,
		Speed:    w.speed,
		From:     from,
		Gust:     w.gust,
		HasGust:  w.hasGust,
		Retained: m.Retained,
	}, true
}

// speed checks a speed in some unit and turns it into m/s.
func (d *Decoder) speed(what string, value, factor float64) (float64, bool) {
	ms := float64(value * factor)
	switch {
	case math.IsNaN(ms) || math.IsInf(value, 0):
		d.refuse(NotFinite, "%s is not a finite number", what)
	case ms < 0 || ms > MaxSpeed:
		d.refuse(Impossible, "%s is %v m/s; expected 0 to %d", what, ms, MaxSpeed)
	default:
		return ms + 0, true // -0 becomes 0, so that equal winds have equal bits
	}
	return 0, false
}

// radianSlack lets a whole turn pass that was rounded up to four decimals
// (6.2832 rad is 360.0008 degrees).
const radianSlack = 0.005

// direction checks an angle in some unit and turns it into degrees. The circle
// is closed: 360 is north.
func (d *Decoder) direction(value, factor float64) (float64, bool) {
	deg := float64(value * factor)
	limit := 360.0
	if factor != 1 {
		limit += radianSlack
	}
	switch {
	case math.IsNaN(deg) || math.IsInf(value, 0):
		d.refuse(NotFinite, "direction is not a finite number")
	case deg < 0 || deg > limit:
		d.refuse(Impossible, "direction is %v degrees; expected 0 to 360", deg)
	default:
		return quantity.NormalizeDegrees(deg) + 0, true
	}
	return 0, false
}
