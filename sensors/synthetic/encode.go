package synthetic

import (
	"encoding/json"
	"fmt"
	"math"
	"strconv"
	"strings"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// encoder writes a station's payloads.
type encoder interface {
	encode(sensors.Reading) []byte
}

// newEncoder is the encoder for the station's format.
func newEncoder(spec *StationSpec) (encoder, error) {
	if spec.Station.Topics != nil {
		return nil, fmt.Errorf("station %s: there is no writer for a topic for each quantity", spec.Station.ID)
	}
	switch spec.Station.Format {
	case sensors.FormatSenMLJSON:
		return senmlEncoder{name: spec.Station.ID + "/", north: spec.north()}, nil
	case sensors.FormatNMEA0183:
		return nmeaEncoder{north: spec.north()}, nil
	case sensors.FormatJSON:
		return newFieldEncoder(spec)
	}
	return nil, fmt.Errorf("there is no writer for the format %q", spec.Station.Format)
}

// indicated is the direction on the instrument's own scale, whole degrees.
func indicated(from, north float64) float64 {
	return quantity.NormalizeDegrees(math.Round(from - north))
}

// senmlEncoder writes RFC 8428 packs: speed, direction and the exercise mark
// as a boolean record.
type senmlEncoder struct {
	name  string
	north float64
}

func (e senmlEncoder) encode(r sensors.Reading) []byte {
	b := make([]byte, 0, 176)
	b = append(b, `[{"bn":`...)
	b = strconv.AppendQuote(b, e.name)
	b = append(b, `,"bt":`...)
	b = appendUnixSeconds(b, r.Time)
	b = append(b, `,"n":"wind_speed","u":"m/s","v":`...)
	b = strconv.AppendFloat(b, r.Speed, 'f', -1, 64)
	b = append(b, `},{"n":"wind_direction","u":"deg","v":`...)
	b = strconv.AppendFloat(b, indicated(r.From, e.north), 'f', -1, 64)
	return append(b, `},{"n":"exercise","vb":true}]`...)
}

// appendUnixSeconds writes an instant as decimal seconds since 1970.
func appendUnixSeconds(b []byte, t sensors.Instant) []byte {
	seconds, ms := int64(t)/1000, int64(t)%1000
	b = strconv.AppendInt(b, seconds, 10)
	if ms != 0 {
		b = fmt.Appendf(b, ".%03d", ms)
	}
	return b
}

// nmeaEncoder writes an MWV sentence relative to the instrument's zero, and
// the proprietary sentence $PSKLX,1 that marks the message as an exercise.
type nmeaEncoder struct{ north float64 }

func (e nmeaEncoder) encode(r sensors.Reading) []byte {
	wind := fmt.Sprintf("WIMWV,%05.1f,R,%.1f,M,A", indicated(r.From, e.north), r.Speed)
	const mark = "PSKLX,1"
	return fmt.Appendf(nil, "$%s*%02X\r\n$%s*%02X\r\n", wind, nmeaChecksum(wind), mark, nmeaChecksum(mark))
}

// nmeaChecksum is the XOR of all bytes between $ and * (NMEA 0183).
func nmeaChecksum(body string) byte {
	var sum byte
	for i := range len(body) {
		sum ^= body[i]
	}
	return sum
}

// fieldEncoder writes one JSON object by a station's field map.
type fieldEncoder struct {
	fields     sensors.FieldMap
	north      float64
	speedUnit  float64 // m/s in one of it
	angleUnit  float64 // degrees in one of it
	exerciseAt string
}

func newFieldEncoder(spec *StationSpec) (encoder, error) {
	if spec.Station.Fields == nil {
		return nil, fmt.Errorf("the format %q needs a field map", spec.Station.Format)
	}
	e := &fieldEncoder{fields: *spec.Station.Fields, north: spec.north()}
	switch e.fields.SpeedUnit {
	case "", "m/s":
		e.speedUnit = 1
	case "kt", "kn":
		e.speedUnit = quantity.Knot
	case "km/h":
		e.speedUnit = quantity.KilometrePerHour
	case "mph":
		e.speedUnit = quantity.MilePerHour
	case "ft/s":
		e.speedUnit = quantity.FootPerSecond
	default:
		return nil, fmt.Errorf("there is no speed unit %q", e.fields.SpeedUnit)
	}
	switch e.fields.DirectionUnit {
	case "", "deg":
		e.angleUnit = 1
	case "rad":
		e.angleUnit = 180 / math.Pi
	default:
		return nil, fmt.Errorf("there is no unit of direction %q", e.fields.DirectionUnit)
	}
	e.exerciseAt = e.fields.Exercise
	if e.exerciseAt == "" {
		e.exerciseAt = "exercise"
	}
	if _, err := e.object(sensors.Reading{}); err != nil {
		return nil, err
	}
	return e, nil
}

func (e *fieldEncoder) encode(r sensors.Reading) []byte {
	object, err := e.object(r)
	if err != nil {
		// newFieldEncoder tried the same names.
		panic("synthetic: a field map that was accepted no longer fits: " + err.Error())
	}
	b, err := json.Marshal(object)
	if err != nil {
		panic("synthetic: numbers, strings and booleans did not marshal: " + err.Error())
	}
	return b
}

// object is the payload as a tree. encoding/json sorts the keys of a map, so
// its text is the same each time.
func (e *fieldEncoder) object(r sensors.Reading) (map[string]any, error) {
	from := indicated(r.From, e.north)
	if e.fields.Toward {
		from = quantity.NormalizeDegrees(from + 180)
	}
	root := map[string]any{}
	put := func(at string, value any) error {
		if at == "" {
			return nil
		}
		return putField(root, at, value)
	}
	for _, field := range []struct {
		at    string
		value any
	}{
		{e.fields.Speed, rounded(r.Speed / e.speedUnit)},
		{e.fields.Direction, rounded(from / e.angleUnit)},
		{e.fields.Time, fieldTime(e.fields.TimeFormat, r.Time)},
		{e.exerciseAt, true},
	} {
		if err := put(field.at, field.value); err != nil {
			return nil, err
		}
	}
	return root, nil
}

// rounded keeps six decimals: more than any instrument sends.
func rounded(x float64) float64 { return math.Round(x*1e6) / 1e6 }

// fieldTime is the instant in the format of a field map.
func fieldTime(format string, t sensors.Instant) any {
	switch format {
	case "unix":
		return float64(t) / 1000
	case "unix-ms":
		return int64(t)
	case "unix-us":
		return int64(t) * 1000
	}
	return t.String()
}

// putField sets the value at a key or JSON Pointer (RFC 6901) of objects.
func putField(object map[string]any, at string, value any) error {
	if !strings.HasPrefix(at, "/") {
		at = "/" + strings.NewReplacer("~", "~0", "/", "~1").Replace(at)
	}
	parts := strings.Split(at[1:], "/")
	for i, part := range parts {
		part = strings.NewReplacer("~1", "/", "~0", "~").Replace(part)
		if i == len(parts)-1 {
			if _, taken := object[part]; taken {
				return fmt.Errorf("two fields of the map are both at %q", at)
			}
			object[part] = value
			return nil
		}
		next, taken := object[part]
		if !taken {
			next = map[string]any{}
			object[part] = next
		}
		child, ok := next.(map[string]any)
		if !ok {
			return fmt.Errorf("the field %q lies inside a value", at)
		}
		object = child
	}
	return nil
}
