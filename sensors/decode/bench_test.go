package decode

import (
	"encoding/json"
	"errors"
	"strconv"
	"strings"
	"testing"

	"github.com/fxamacker/cbor/v2"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// One reading in each format.
const (
	benchSenML = `[{"bn":"urn:dev:mast:touch07:","bt":1782907199.5,"n":"wind_speed","u":"m/s","v":6.43},{"n":"wind_direction","u":"deg","v":245.3}]`
	benchNMEA  = "$WIMWV,041.1,R,01.0,N,A*16\r\n"
	benchJSON  = `{"station":"touch07","time":1782907199500,"speed":6.43,"direction":245.3,"battery":12.61}`
)

func benchFields() *sensors.FieldMap {
	return &sensors.FieldMap{Speed: "speed", Direction: "direction", Time: "time", TimeFormat: "unix-ms"}
}

// The yardsticks below do the least that could be called decoding one reading.

// handFlat scans one flat JSON object with known keys: no escapes, no nesting,
// no base fields.
func handFlat(b []byte) (station string, at int64, speed, direction float64, err error) {
	i := 1
	for i < len(b) && b[i] != '}' {
		if b[i] == ',' {
			i++
		}
		if b[i] != '"' {
			return "", 0, 0, 0, errors.New("no key")
		}
		end := i + 1
		for b[end] != '"' {
			end++
		}
		key := b[i+1 : end]
		i = end + 2
		start := i
		if b[i] == '"' {
			for i++; b[i] != '"'; i++ {
			}
			i++
			if string(key) == "station" {
				station = string(b[start+1 : i-1])
			}
			continue
		}
		for b[i] != ',' && b[i] != '}' {
			i++
		}
		switch text := string(b[start:i]); string(key) {
		case "time":
			at, err = strconv.ParseInt(text, 10, 64)
		case "speed":
			speed, err = strconv.ParseFloat(text, 64)
		case "direction":
			direction, err = strconv.ParseFloat(text, 64)
		}
		if err != nil {
			return "", 0, 0, 0, err
		}
	}
	return station, at, speed, direction, nil
}

// handMWV scans one MWV sentence byte by byte.
func handMWV(b []byte) (angle, speed float64, ok bool) {
	var sum byte
	i := 1
	for ; i < len(b) && b[i] != '*'; i++ {
		sum ^= b[i]
	}
	if i+3 > len(b) {
		return 0, 0, false
	}
	want, err := strconv.ParseUint(string(b[i+1:i+3]), 16, 8)
	if err != nil || byte(want) != sum || string(b[3:6]) != "MWV" {
		return 0, 0, false
	}
	field, start := 0, 7
	for j := 7; j <= i; j++ {
		if b[j] != ',' && b[j] != '*' {
			continue
		}
		switch field {
		case 0:
			angle, err = strconv.ParseFloat(string(b[start:j]), 64)
		case 2:
			speed, err = strconv.ParseFloat(string(b[start:j]), 64)
		case 3:
			if b[start] == 'N' {
				speed *= quantity.Knot
			}
		}
		if err != nil {
			return 0, 0, false
		}
		field, start = field+1, j+1
	}
	return angle, speed, true
}

// splitMWV does the same with strings.Split.
func splitMWV(s string) (angle, speed float64, ok bool) {
	body, _, found := strings.Cut(s, "*")
	parts := strings.Split(body, ",")
	if !found || len(parts) != 6 {
		return 0, 0, false
	}
	angle, err1 := strconv.ParseFloat(parts[1], 64)
	speed, err2 := strconv.ParseFloat(parts[3], 64)
	return angle, speed * quantity.Knot, err1 == nil && err2 == nil
}

// benchDecoder measures one message after another through a decoder.
func benchDecoder(b *testing.B, station sensors.Station, payload string) {
	d, m := newDecoder(b, station), message(payload)
	dst := make([]sensors.Reading, 0, 1)
	b.ReportAllocs()
	for b.Loop() {
		got, err := d.Decode(dst, m, 0)
		if err != nil || len(got) != 1 {
			b.Fatal(got, err)
		}
	}
}

func BenchmarkSenML(b *testing.B) {
	b.Run("decoder", func(b *testing.B) {
		benchDecoder(b, sensors.Station{Format: sensors.FormatSenMLJSON}, benchSenML)
	})
	b.Run("hand-flat", benchHandFlat)
	b.Run("encoding-json", func(b *testing.B) {
		payload := []byte(benchSenML)
		b.ReportAllocs()
		for b.Loop() {
			var records []resolved
			if err := json.Unmarshal(payload, &records); err != nil || len(records) != 2 {
				b.Fatal(err)
			}
		}
	})
}

func BenchmarkSenMLCBOR(b *testing.B) {
	payload := inCBOR(b, []byte(benchSenML), true)
	b.Run("decoder", func(b *testing.B) {
		benchDecoder(b, sensors.Station{Format: sensors.FormatSenMLCBOR}, string(payload))
	})
	b.Run("fxamacker", func(b *testing.B) {
		b.ReportAllocs()
		for b.Loop() {
			var records []struct {
				Name  string  `cbor:"0,keyasint"`
				Base  string  `cbor:"-2,keyasint"`
				Time  float64 `cbor:"-3,keyasint"`
				Unit  string  `cbor:"1,keyasint"`
				Value float64 `cbor:"2,keyasint"`
			}
			if err := cbor.Unmarshal(payload, &records); err != nil || len(records) != 2 || records[0].Value != 6.43 {
				b.Fatal(records, err)
			}
		}
	})
}

// BenchmarkXDR is a wind with its least and greatest value.
func BenchmarkXDR(b *testing.B) {
	benchDecoder(b, sensors.Station{Format: sensors.FormatNMEA0183}, "$WIXDR,A,250.1,D,0,A,254.0,D,1,A,262.3,D,2,S,3.1,M,0,S,4.2,M,1,S,5.0,M,2*4A")
}

func benchHandFlat(b *testing.B) {
	payload := []byte(benchJSON)
	b.ReportAllocs()
	for b.Loop() {
		if _, _, speed, _, err := handFlat(payload); err != nil || speed != 6.43 {
			b.Fatal(speed, err)
		}
	}
}

func BenchmarkJSON(b *testing.B) {
	b.Run("decoder", func(b *testing.B) {
		benchDecoder(b, sensors.Station{Format: sensors.FormatJSON, Fields: benchFields()}, benchJSON)
	})
	b.Run("hand-flat", benchHandFlat)
	b.Run("encoding-json", func(b *testing.B) {
		payload := []byte(benchJSON)
		b.ReportAllocs()
		for b.Loop() {
			var document struct {
				Time             int64
				Speed, Direction float64
			}
			if err := json.Unmarshal(payload, &document); err != nil || document.Speed != 6.43 {
				b.Fatal(err)
			}
		}
	})
}

func BenchmarkNMEA(b *testing.B) {
	b.Run("decoder", func(b *testing.B) {
		benchDecoder(b, sensors.Station{Format: sensors.FormatNMEA0183}, benchNMEA)
	})
	b.Run("hand-bytes", func(b *testing.B) {
		payload := []byte(benchNMEA)
		b.ReportAllocs()
		for b.Loop() {
			if angle, _, ok := handMWV(payload); !ok || angle != 41.1 {
				b.Fatal(angle)
			}
		}
	})
	b.Run("split", func(b *testing.B) {
		b.ReportAllocs()
		for b.Loop() {
			if angle, _, ok := splitMWV(benchNMEA); !ok || angle != 41.1 {
				b.Fatal(angle)
			}
		}
	})
}
