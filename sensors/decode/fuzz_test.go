package decode

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"regexp"
	"strconv"
	"strings"
	"testing"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// decodeSound decodes twice and checks what holds for any payload whatever.
func decodeSound(t *testing.T, d *Decoder, payload []byte) ([]sensors.Reading, Rejections) {
	t.Helper()
	m := sensors.Message{Payload: payload, Received: noon}
	untouched := bytes.Clone(payload)
	readings, err := d.Decode(nil, m, 0)
	again, errAgain := d.Decode(nil, m, 0)
	if fmt.Sprint(readings, err) != fmt.Sprint(again, errAgain) {
		t.Fatalf("decoded twice:\n%v %v\n%v %v", readings, err, again, errAgain)
	}
	if !bytes.Equal(payload, untouched) {
		t.Fatal("the payload was changed")
	}
	var list Rejections
	if err != nil && (!errors.As(err, &list) || len(list) == 0 || len(list) > len(Reasons())) {
		t.Fatalf("error %v", err)
	}
	for _, r := range readings {
		if !(0 <= r.Speed && r.Speed <= MaxSpeed) || !(0 <= r.From && r.From < 360) || (r.HasGust && !(0 <= r.Gust && r.Gust <= MaxSpeed)) ||
			math.Signbit(r.Speed) || r.Time < 0 || r.Arrival != noon {
			t.Fatalf("reading %+v", r)
		}
	}
	return readings, list
}

// strictJSON decodes with the standard library: one document, numbers kept as
// text.
func strictJSON(payload []byte) (document any, ok bool) {
	if !json.Valid(payload) {
		return nil, false
	}
	decoder := json.NewDecoder(bytes.NewReader(payload))
	decoder.UseNumber()
	return document, decoder.Decode(&document) == nil
}

// floatOf is the value of a JSON number, false for everything else and for
// what a float64 cannot hold.
func floatOf(v any) (float64, bool) {
	n, ok := v.(json.Number)
	if !ok {
		return 0, false
	}
	f, err := strconv.ParseFloat(string(n), 64)
	return f, err == nil
}

func FuzzJSON(f *testing.F) {
	for _, seed := range []string{
		benchJSON, `{"speed":1,"direction":2}`, `{"speed":"1.5","direction":"2"}`, `{"w":[{"s":3,"d":4}]}`, `{"w":[{"s":3,"d":4},{"s":-1,"d":4},{"s":5,"d":6,"exercise":true}]}`,
		`{"speed":1e400,"direction":2}`, `{"sp\u0065ed":1,"direction":360,"speed":7}`, `[[],{},"\ud83d\ude00",null,true]`,
		`{"w":[{"s":3},5],"w":[{"d":4}]}`, strings.Repeat("[", 40), `{"speed":-0.0,"direction":-0}`,
	} {
		f.Add([]byte(seed))
	}
	flat := newDecoder(f, sensors.Station{Format: sensors.FormatJSON, Fields: &sensors.FieldMap{Speed: "speed", Direction: "direction"}})
	deep := newDecoder(f, sensors.Station{Format: sensors.FormatJSON, Fields: &sensors.FieldMap{Speed: "/w/0/s", Direction: "/w/0/d"}})
	samples := newDecoder(f, sensors.Station{Format: sensors.FormatJSON, Fields: &sensors.FieldMap{Samples: "w", Speed: "s", Direction: "d", Time: "t"}})
	f.Fuzz(func(t *testing.T, payload []byte) {
		document, valid := strictJSON(payload)
		if readings, list := decodeSound(t, samples, payload); !valid && (len(readings) > 0 || len(list) == 0) {
			t.Fatalf("not JSON, but %v, %v", readings, list)
		}
		top, _ := document.(map[string]any)
		inner := map[string]any{}
		if list, _ := top["w"].([]any); len(list) > 0 {
			inner, _ = list[0].(map[string]any)
		}
		checkMapped(t, flat, payload, valid, top["speed"], top["direction"])
		checkMapped(t, deep, payload, valid, inner["s"], inner["d"])
	})
}

// checkMapped compares a decoder with what the standard library found at the
// two places.
func checkMapped(t *testing.T, d *Decoder, payload []byte, valid bool, speed, direction any) {
	t.Helper()
	readings, list := decodeSound(t, d, payload)
	if !valid && len(list) == 0 {
		t.Fatalf("not JSON, but in order: %q", payload)
	}
	for _, one := range list {
		if one.Reason == TooLarge {
			return // deeper than the standard library minds
		}
	}
	wantSpeed, ok1 := floatOf(speed)
	wantFrom, ok2 := floatOf(direction)
	numbers := valid && ok1 && ok2 && 0 <= wantSpeed && wantSpeed <= MaxSpeed && 0 <= wantFrom && wantFrom <= 360
	if numbers && len(readings) != 1 {
		t.Fatalf("%q: speed %v, direction %v, but %v", payload, wantSpeed, wantFrom, list)
	}
	for _, r := range readings {
		if !valid {
			t.Fatalf("a reading from what is not JSON: %q", payload)
		}
		if ok1 && r.Speed != wantSpeed || ok2 && r.From != math.Mod(wantFrom, 360) {
			t.Fatalf("%q: %v from %v, want %v from %v", payload, r.Speed, r.From, wantSpeed, wantFrom)
		}
		for _, v := range []any{speed, direction} { // anything but a number must be a string that holds one
			if _, isText := v.(string); !isText {
				if _, isNumber := floatOf(v); !isNumber {
					t.Fatalf("%q: a reading from %v", payload, v)
				}
			}
		}
	}
}

// oracleWinds resolves a SenML pack with the standard library, without
// checking it: the winds, in m/s and degrees, that could come of it.
func oracleWinds(document any) map[string]bool {
	winds := map[string]bool{}
	records, _ := document.([]any)
	var name, unit string
	var baseTime, baseValue float64
	speeds, directions := map[string][]float64{}, map[string][]float64{}
	for _, item := range records {
		fields, _ := item.(map[string]any)
		if s, ok := fields["bn"].(string); ok {
			name = s
		}
		if s, ok := fields["bu"].(string); ok {
			unit = s
		}
		if v, ok := floatOf(fields["bt"]); ok {
			baseTime = v
		}
		if v, ok := floatOf(fields["bv"]); ok {
			baseValue = v
		}
		own, _ := fields["n"].(string)
		u := unit
		if s, ok := fields["u"].(string); ok {
			u = s
		}
		seconds, _ := floatOf(fields["t"])
		at, _ := instantOf(baseTime+seconds, noon)
		value, ok := floatOf(fields["v"])
		value += baseValue
		if prefix, found := strings.CutSuffix(name+own, "wind_speed"); found && ok {
			factor, _ := quantity.SpeedUnit(u)
			key := fmt.Sprint(prefix, "|", int64(at))
			speeds[key] = append(speeds[key], value*factor)
		}
		if prefix, found := strings.CutSuffix(name+own, "wind_direction"); found && ok {
			factor, _ := quantity.AngleUnit(u)
			key := fmt.Sprint(prefix, "|", int64(at))
			directions[key] = append(directions[key], quantity.NormalizeDegrees(value*factor))
		}
	}
	for key, list := range speeds {
		_, at, _ := strings.Cut(key, "|")
		for _, speed := range list {
			for _, from := range directions[key] {
				winds[fmt.Sprint(at, " ", speed+0, " ", from+0)] = true
			}
		}
	}
	return winds
}

func FuzzSenML(f *testing.F) {
	for _, seed := range []string{
		benchSenML, `[]`, `[{"n":"wind_speed","u":"kt","v":10,"t":-3},{"n":"wind_direction","u":"rad","v":1,"t":-3}]`,
		`[{"bn":"a:","bt":1782907000,"bu":"m/s","bv":1,"n":"wind_speed","v":1},{"n":"wind_direction","u":"deg","v":240},{"n":"exercise","vb":true}]`,
		`[{"bver":10,"n":"x","vs":"\u00e9"},{"n":"y","vd":"aGk"},{"n":"z","s":1,"ut":5}]`, `[{"n":"a","x_":1}]`,
		`[{"bn":"a:wind_"},{"n":"speed","u":"m/s","v":3},{"n":"direction","u":"deg","v":3},{"n":"gust","u":"m/s","v":9}]`,
	} {
		f.Add([]byte(seed))
	}
	d := newDecoder(f, sensors.Station{Format: sensors.FormatSenMLJSON})
	f.Fuzz(func(t *testing.T, payload []byte) {
		readings, list := decodeSound(t, d, payload)
		document, valid := strictJSON(payload)
		if !valid && len(list) == 0 {
			t.Fatalf("not JSON, but in order: %q", payload)
		}
		if len(readings) == 0 {
			return
		}
		if !valid {
			t.Fatalf("a reading from what is not JSON: %q", payload)
		}
		winds := oracleWinds(document)
		for _, r := range readings {
			if key := fmt.Sprint(int64(r.Time), " ", r.Speed, " ", r.From); !winds[key] {
				t.Fatalf("%q: %s is none of %v", payload, key, winds)
			}
		}
	})
}

// oracleNMEA decodes a message the slow way.
func oracleNMEA(payload string) (winds []string) {
	decimal := regexp.MustCompile(`^[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)$`)
	parse := func(s string) float64 {
		if s = strings.TrimSpace(s); decimal.MatchString(s) {
			if v, err := strconv.ParseFloat(s, 64); err == nil {
				return v
			}
		}
		return math.NaN()
	}
	add := func(angle, speed float64) {
		if 0 <= angle && angle <= 360 && 0 <= speed && speed <= MaxSpeed {
			winds = append(winds, fmt.Sprint(speed+0, " ", math.Mod(angle, 360)+0))
		}
	}
	units := map[string]float64{"K": 1 / 3.6, "M": 1, "N": 1852.0 / 3600, "S": 0.44704}
	for _, line := range strings.FieldsFunc(payload, func(r rune) bool { return r == '\r' || r == '\n' }) {
		line = strings.TrimSpace(line)
		star := strings.LastIndexByte(line, '*')
		if len(line) < 4 || (line[0] != '$' && line[0] != '!') || star != len(line)-3 {
			continue
		}
		sum := 0
		for _, c := range []byte(line[1:star]) {
			sum ^= int(c)
		}
		if want, err := strconv.ParseUint(line[star+1:], 16, 8); err != nil || int(want) != sum {
			continue
		}
		part := strings.Split(line[1:star], ",")
		if len(part[0]) != 5 || part[0][0] == 'P' {
			continue
		}
		if part[0][2:] == "MDA" && len(part) == 21 { // its last eight fields are those of MWD
			part = append([]string{"WIMWD"}, part[13:]...)
		}
		switch {
		case part[0][2:] == "MWV" && len(part) == 6 && part[5] == "A" && (part[2] == "R" || part[2] == "T"):
			if factor, ok := units[part[4]]; ok {
				add(parse(part[1]), parse(part[3])*factor)
			}
		case part[0][2:] == "MWD" && len(part) == 9:
			letters, empty := [4]string{"T", "M", "N", "M"}, [4]bool{}
			sound := true
			var v [4]float64
			for i := range 4 {
				empty[i] = part[1+2*i] == ""
				if !empty[i] {
					v[i] = parse(part[1+2*i])
					sound = sound && part[2+2*i] == letters[i] && !math.IsNaN(v[i])
				}
			}
			if !sound || (empty[0] && empty[1]) || (empty[2] && empty[3]) {
				continue
			}
			kt, angle, speed := v[2]*(1852.0/3600), v[0], v[3]
			if apart := math.Abs(kt - speed); !empty[2] && !empty[3] && apart > 0.3 && apart > 0.1*max(math.Abs(kt), math.Abs(speed)) {
				continue
			}
			if empty[0] {
				angle = v[1]
			}
			if empty[3] {
				speed = kt
			}
			add(angle, speed)
		}
	}
	return winds
}

func FuzzNMEA(f *testing.F) {
	for _, seed := range []string{
		benchNMEA, "$WIMWD,328.2,T,326.8,M,11.2,N,5.8,M*61", "$WIMWV,,T,,N,V*32\r$WIMWV,350.0,R,6.4,M,A*24\n",
		"$PSKLX,1*41\r\n$WIMWV,045.0,T,12.5,N,A*12", "$GPGLL,5057.970,N,00146.110,E,142451,A*27",
		"$WIMDA,30.2,I,1.01,B,23.4,C,,,40.2,,12.1,C,19.3,T,20.1,M,13.1,N,6.7,M", "!AIVDM,1*00", "$*00",
	} {
		f.Add([]byte(seed))
	}
	d := newDecoder(f, sensors.Station{Format: sensors.FormatNMEA0183})
	f.Fuzz(func(t *testing.T, payload []byte) {
		check := func(payload []byte) {
			if bytes.Contains(payload, []byte("XDR")) {
				decodeSound(t, d, payload) // has an oracle of its own, FuzzXDR
				return
			}
			readings, list := decodeSound(t, d, payload)
			if len(readings) == MaxReadings {
				return
			}
			var got []string
			for _, r := range readings {
				got = append(got, fmt.Sprint(r.Speed, " ", r.From))
			}
			if want := oracleNMEA(string(payload)); strings.Join(got, ";") != strings.Join(want, ";") {
				t.Fatalf("%q: %v (%v), want %v", payload, got, list, want)
			}
		}
		check(payload)
		// Chance hardly ever makes a checksum: give each line the right one as
		// well.
		var mended []string
		for _, line := range strings.Split(string(payload), "\n") {
			body, _, _ := strings.Cut(strings.TrimPrefix(strings.TrimSpace(line), "$"), "*")
			mended = append(mended, sentence(body))
		}
		check([]byte(strings.Join(mended, "\n")))
	})
}
