package decode

import (
	"errors"
	"fmt"
	"math"
	"strings"
	"testing"

	"sockline/sensors"
)

// noon is the arrival stamp of the tests.
const noon sensors.Instant = 1782907200_000 // 2026-07-01T12:00:00Z

// newDecoder makes a decoder for a station, as station 3.
func newDecoder(tb testing.TB, station sensors.Station) *Decoder {
	tb.Helper()
	if station.ID == "" {
		station.ID = "touch07"
	}
	d, err := New(station, 3)
	if err != nil {
		tb.Fatalf("New: %v", err)
	}
	return d
}

// message wraps a payload.
func message(payload string) sensors.Message {
	return sensors.Message{Topic: "airfield/skerrymoor/station/touch07/wind", Payload: []byte(payload), Received: noon}
}

// show writes readings so that a difference can be read: seconds after noon,
// speed, direction, gust, marks.
func show(readings []sensors.Reading) string {
	var parts []string
	for _, r := range readings {
		s := fmt.Sprintf("%+.3fs %.6g@%.6g", r.Time.Sub(noon).Seconds(), r.Speed, r.From)
		if r.HasGust {
			s += fmt.Sprintf(" gust %.6g", r.Gust)
		}
		if r.Exercise {
			s += " exercise"
		}
		if r.Retained {
			s += " retained"
		}
		parts = append(parts, s)
	}
	return strings.Join(parts, "; ")
}

// reasons lists the reasons of an error of Decode, with counts above one.
func reasons(err error) string {
	var list Rejections
	if !errors.As(err, &list) {
		return ""
	}
	var parts []string
	for _, one := range list {
		s := string(one.Reason)
		if one.Count > 1 {
			s += fmt.Sprintf(" x%d", one.Count)
		}
		parts = append(parts, s)
	}
	return strings.Join(parts, " ")
}

// payloadRow is one payload and what must come of it.
type payloadRow struct {
	name, payload string
	want          string // as show writes it
	reasons       string // as reasons writes it
}

// checkRows decodes each row with d, after a reading that must stay in place.
func checkRows(t *testing.T, d *Decoder, rows []payloadRow) {
	t.Helper()
	for _, row := range rows {
		t.Run(row.name, func(t *testing.T) {
			before := []sensors.Reading{{Station: 9, Speed: 99}}
			got, err := d.Decode(before, message(row.payload), 0)
			if got[0] != before[0] {
				t.Errorf("what was in dst changed to %+v", got[0])
			}
			if show(got[1:]) != row.want {
				t.Errorf("readings %q, want %q", show(got[1:]), row.want)
			}
			if reasons(err) != row.reasons {
				t.Errorf("reasons %q (%v), want %q", reasons(err), err, row.reasons)
			}
			for _, r := range got[1:] {
				if r.Station != 3 || r.Arrival != noon {
					t.Errorf("station %d, arrival %v; want 3, %v", r.Station, r.Arrival, noon)
				}
			}
		})
	}
}

func TestNewRefuses(t *testing.T) {
	fields := func(change func(*sensors.FieldMap)) *sensors.FieldMap {
		f := &sensors.FieldMap{Speed: "speed", Direction: "direction"}
		change(f)
		return f
	}
	for _, row := range []struct {
		name    string
		station sensors.Station
		phrase  string
	}{
		{"unknown format", sensors.Station{Format: "morse"}, `format "morse" is not known; expected "senml+json"`},
		{"no fields", sensors.Station{Format: sensors.FormatJSON}, "at least speed and direction"},
		{"no speed", sensors.Station{Format: sensors.FormatJSON, Fields: fields(func(f *sensors.FieldMap) { f.Speed = "" })}, "speed is missing"},
		{"no direction", sensors.Station{Format: sensors.FormatJSON, Fields: fields(func(f *sensors.FieldMap) { f.Direction = "" })}, "direction is missing"},
		{"speed unit", sensors.Station{Format: sensors.FormatJSON, Fields: fields(func(f *sensors.FieldMap) { f.SpeedUnit = "knots" })}, `"knots" is not known`},
		{"direction unit", sensors.Station{Format: sensors.FormatJSON, Fields: fields(func(f *sensors.FieldMap) { f.DirectionUnit = "grad" })}, `"grad" is not known`},
		{"time format", sensors.Station{Format: sensors.FormatJSON, Fields: fields(func(f *sensors.FieldMap) { f.TimeFormat = "stardate" })}, `"stardate" is not known`},
		{"pointer", sensors.Station{Format: sensors.FormatJSON, Fields: fields(func(f *sensors.FieldMap) { f.Gust = "/a~2b" })}, "is not a JSON Pointer"},
		{"pointer too deep", sensors.Station{Format: sensors.FormatJSON, Fields: fields(func(f *sensors.FieldMap) { f.Speed = strings.Repeat("/a", 40) })}, "deeper than 32"},
	} {
		row.station.ID = "far07"
		_, err := New(row.station, 0)
		if err == nil || !strings.Contains(err.Error(), row.phrase) || !strings.Contains(err.Error(), `"far07"`) {
			t.Errorf("%s: error %v, want the station and %q", row.name, err, row.phrase)
		}
	}
}

func TestNorth(t *testing.T) {
	// Expected directions by hand: true = magnetic + variation (east +), plus
	// the offset of the mast, brought into [0, 360).
	const (
		mwv   = "$WIMWV,350.0,R,6.4,M,A*24"
		mwd   = "$WIMWD,350.0,T,355.0,M,19.4,N,10.0,M*52"
		mwdM  = "$WIMWD,,T,355.0,M,19.4,N,,M*65"
		senml = `[{"bn":"a:","n":"wind_speed","u":"m/s","v":5},{"n":"wind_direction","u":"deg","v":350}]`
	)
	for _, row := range []struct {
		name      string
		format    sensors.Format
		north     sensors.North
		offset    float64
		payload   string
		variation float64
		want      float64
	}{
		{"true north needs nothing", sensors.FormatSenMLJSON, sensors.NorthTrue, 0, senml, -6.1, 350},
		{"unnamed north is true", sensors.FormatSenMLJSON, "", 0, senml, -6.1, 350},
		{"magnetic, west variation", sensors.FormatSenMLJSON, sensors.NorthMagnetic, 0, senml, -6.5, 343.5},
		{"magnetic, through north", sensors.FormatSenMLJSON, sensors.NorthMagnetic, 0, senml, 12, 2},
		{"offset", sensors.FormatSenMLJSON, sensors.NorthTrue, -4, senml, 7, 346},
		{"offset and magnetic", sensors.FormatSenMLJSON, sensors.NorthMagnetic, 15, senml, 5, 10},
		{"MWV from the instrument's zero", sensors.FormatNMEA0183, sensors.NorthTrue, 20, mwv, 3, 10},
		{"MWV magnetic", sensors.FormatNMEA0183, sensors.NorthMagnetic, 0, mwv, -3, 347},
		{"MWD is true whatever the station says", sensors.FormatNMEA0183, sensors.NorthMagnetic, 0, mwd, -3, 350},
		{"MWD magnetic only, whatever the station says", sensors.FormatNMEA0183, sensors.NorthTrue, 0, mwdM, -3, 352},
		{"MWD with offset", sensors.FormatNMEA0183, sensors.NorthTrue, -10, mwd, 0, 340},
	} {
		t.Run(row.name, func(t *testing.T) {
			d := newDecoder(t, sensors.Station{Format: row.format, North: row.north, NorthOffset: row.offset})
			got, err := d.Decode(nil, message(row.payload), row.variation)
			if err != nil || len(got) != 1 {
				t.Fatalf("%v, %v", got, err)
			}
			if math.Abs(got[0].From-row.want) > 1e-9 {
				t.Errorf("from %v, want %v", got[0].From, row.want)
			}
		})
	}
}

func TestVariationThatIsNoNumber(t *testing.T) {
	d := newDecoder(t, sensors.Station{Format: sensors.FormatNMEA0183, North: sensors.NorthMagnetic})
	got, err := d.Decode(nil, message("$WIMWV,350.0,R,6.4,M,A*24"), math.NaN())
	if len(got) != 0 || reasons(err) != "not-finite" {
		t.Errorf("%v, %v; want no reading and not-finite", got, err)
	}
}

func TestRetainedIsKept(t *testing.T) {
	d := newDecoder(t, sensors.Station{Format: sensors.FormatNMEA0183})
	m := message("$WIMWV,350.0,R,6.4,M,A*24")
	m.Retained = true
	got, err := d.Decode(nil, m, 0)
	if err != nil || show(got) != "+0.000s 6.4@350 retained" {
		t.Errorf("%q, %v", show(got), err)
	}
}

func TestTooLarge(t *testing.T) {
	for _, format := range []sensors.Format{sensors.FormatSenMLJSON, sensors.FormatNMEA0183} {
		d := newDecoder(t, sensors.Station{Format: format})
		got, err := d.Decode(nil, message(strings.Repeat(" ", MaxPayload+1)), 0)
		if len(got) != 0 || reasons(err) != "too-large" {
			t.Errorf("%s: %v, %v; want too-large", format, got, err)
		}
	}
}

func TestRejections(t *testing.T) {
	d := newDecoder(t, sensors.Station{Format: sensors.FormatNMEA0183})
	_, err := d.Decode(nil, message("garbage\nmore\n$WIMWV,,T,,N,V*32\nrubbish"), 0)
	var one *Rejection
	if !errors.As(err, &one) || one.Reason != Malformed || one.Count != 3 {
		t.Fatalf("%v, want malformed three times", err)
	}
	for _, phrase := range []string{`malformed: "garbage" is not a sentence`, "(and 2 more)", "not-valid"} {
		if !strings.Contains(err.Error(), phrase) {
			t.Errorf("%q does not say %q", err, phrase)
		}
	}
	var all Rejections
	if errors.As(err, &all); !all.Refused() {
		t.Error("a payload with garbage does not count as refused")
	}
	_, err = d.Decode(nil, message("$WIMWV,,T,,N,V*32"), 0)
	if errors.As(err, &all); all.Refused() || len(all) != 1 {
		t.Errorf("%v: an instrument without a valid wind counts as refused", err)
	}
	seen := map[Reason]bool{}
	for _, reason := range Reasons() {
		if seen[reason] || reason == "" {
			t.Errorf("Reasons lists %q twice or empty", reason)
		}
		seen[reason] = true
	}
	if len(seen) != 14 {
		t.Errorf("%d reasons, want 14", len(seen))
	}
}

func TestAllocations(t *testing.T) {
	for _, row := range []struct {
		name    string
		station sensors.Station
		payload string
		most    float64
	}{
		{"senml", sensors.Station{Format: sensors.FormatSenMLJSON}, benchSenML, 0},
		{"senml in cbor", sensors.Station{Format: sensors.FormatSenMLCBOR}, string(inCBOR(t, []byte(benchSenML), true)), 1}, // in the check for well-formedness
		{"nmea", sensors.Station{Format: sensors.FormatNMEA0183}, benchNMEA, 0},
		{"json", sensors.Station{Format: sensors.FormatJSON, Fields: benchFields()}, benchJSON, 0},
	} {
		d, m := newDecoder(t, row.station), message(row.payload)
		dst := make([]sensors.Reading, 0, 4)
		n := testing.AllocsPerRun(200, func() {
			got, err := d.Decode(dst, m, 0)
			if err != nil || len(got) != 1 {
				t.Fatalf("%s: %v, %v", row.name, got, err)
			}
		})
		if n > row.most { // two a reading would be allowed; hardly any are needed
			t.Errorf("%s: %v allocations a reading, want %v", row.name, n, row.most)
		}
	}
}
