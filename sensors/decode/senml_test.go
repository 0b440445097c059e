package decode

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"strings"
	"testing"

	"sockline/sensors"
)

// resolved is a record as the table of packs writes it.
type resolved struct {
	Name    string   `json:"n"`
	Time    float64  `json:"t"`
	Unit    string   `json:"u"`
	Value   *float64 `json:"v"`
	String  *string  `json:"vs"`
	Boolean *bool    `json:"vb"`
	Data    *string  `json:"vd"`
	Sum     *float64 `json:"s"`
	Update  *float64 `json:"ut"`
	Version *float64 `json:"bver"`
}

// show writes a record on one line.
func (r resolved) show() string {
	s := fmt.Sprintf("%s t=%.3f u=%q", r.Name, r.Time, r.Unit)
	for _, f := range []struct {
		label string
		value *float64
	}{{"v", r.Value}, {"s", r.Sum}, {"ut", r.Update}, {"bver", r.Version}} {
		if f.value != nil {
			s += fmt.Sprintf(" %s=%.9g", f.label, *f.value)
		}
	}
	if r.String != nil {
		s += " text=" + *r.String
	}
	if r.Data != nil {
		s += " text=" + *r.Data
	}
	if r.Boolean != nil {
		s += fmt.Sprintf(" vb=%v", *r.Boolean)
	}
	return s
}

// resolveAll walks a pack in JSON and shows its resolved records.
func resolveAll(d *Decoder, payload []byte, now sensors.Instant) (shown []string, ok bool) {
	return resolvedBy(d, d.records, payload, now)
}

func resolvedBy(d *Decoder, records func([]byte, func(*pack, *record)) bool, payload []byte, now sensors.Instant) (shown []string, ok bool) {
	d.faults = nil
	ok = records(payload, func(p *pack, r *record) {
		if r.name == nil {
			return
		}
		at, valid := instantOf(r.time, now)
		if !valid {
			shown = append(shown, "bad time")
			return
		}
		out := resolved{Name: string(r.name), Unit: string(r.unit), Time: float64(at) / 1000}
		content := string(p.scan.data[r.value.start:r.value.end])
		switch r.value.kind {
		case numeric:
			out.Value = &r.value.number
		case text, octets:
			out.String = &content
		case boolean:
			out.Boolean = &r.value.truth
		}
		if r.sum.kind == numeric {
			out.Sum = &r.sum.number
		}
		if r.update.kind == numeric {
			out.Update = &r.update.number
		}
		if p.version != senMLVersion {
			out.Version = &p.version
		}
		shown = append(shown, out.show())
	})
	return shown, ok
}

func TestSenMLVectors(t *testing.T) {
	// Resolved by a jq program, not by this project; see the note in the file.
	data, err := os.ReadFile("../../testdata/outside/senml_vectors.json")
	if err != nil {
		t.Fatal(err)
	}
	var table struct {
		Now   int64
		Cases []struct {
			Name     string
			Pack     json.RawMessage
			Resolved []resolved
		}
		Reject []struct {
			Why  string
			Pack json.RawMessage
		}
	}
	if err := json.Unmarshal(data, &table); err != nil {
		t.Fatal(err)
	}
	if len(table.Cases) != 14 || len(table.Reject) != 9 {
		t.Fatalf("%d and %d cases, want 14 and 9", len(table.Cases), len(table.Reject))
	}
	d := newDecoder(t, sensors.Station{Format: sensors.FormatSenMLJSON})
	now := sensors.Instant(table.Now * 1000)
	for _, row := range table.Cases {
		t.Run(row.Name, func(t *testing.T) {
			got, ok := resolveAll(d, row.Pack, now)
			if !ok {
				t.Fatalf("refused: %v", d.faults)
			}
			var want []string
			for _, r := range row.Resolved {
				want = append(want, r.show())
			}
			if strings.Join(got, "\n") != strings.Join(want, "\n") {
				t.Errorf("got\n%s\nwant\n%s", strings.Join(got, "\n"), strings.Join(want, "\n"))
			}
		})
	}
	for _, row := range table.Reject {
		t.Run(row.Why, func(t *testing.T) {
			if got, ok := resolveAll(d, row.Pack, now); ok || len(d.faults) != 1 {
				t.Errorf("accepted as %v (%v)", got, d.faults)
			}
			if readings, err := d.Decode(nil, message(string(row.Pack)), 0); err == nil || len(readings) > 0 {
				t.Errorf("Decode gave %v, %v", readings, err)
			}
		})
	}
}

func TestSenMLWind(t *testing.T) {
	// By the rules of RFC 8428 sections 4.5 and 4.6, worked by hand. noon is
	// 1782907200 as a Unix time.
	const dir = `{"n":"wind_direction","u":"deg","v":240}`
	speed := func(more string) string {
		return `[{"bn":"m:","n":"wind_speed",` + more + `},` + dir + `]`
	}
	checkRows(t, newDecoder(t, sensors.Station{Format: sensors.FormatSenMLJSON}), []payloadRow{
		{"pair", speed(`"u":"m/s","v":7.2`), "+0.000s 7.2@240", ""},
		{"km/h", speed(`"u":"km/h","v":36`), "+0.000s 10@240", ""},
		{"kn", speed(`"u":"kn","v":10`), "+0.000s 5.14444@240", ""},
		{"kt", speed(`"u":"kt","v":10`), "+0.000s 5.14444@240", ""},
		{"mph", speed(`"u":"mph","v":10`), "+0.000s 4.4704@240", ""},
		{"rad", `[{"bn":"m:","n":"wind_speed","u":"m/s","v":5},{"n":"wind_direction","u":"rad","v":3.141592653589793}]`, "+0.000s 5@180", ""},
		{"whole turn in rounded rad", `[{"bn":"m:","n":"wind_speed","u":"m/s","v":5},{"n":"wind_direction","u":"rad","v":6.2832}]`, "+0.000s 5@0.000841837", ""},
		{"gust", `[{"bn":"m:","bu":"m/s","n":"wind_speed","v":5},{"n":"wind_gust","v":8},` + dir + `]`, "+0.000s 5@240 gust 8", ""},
		{"direction first", `[` + dir + `,{"n":"wind_speed","u":"m/s","v":5}]`, "+0.000s 5@240", ""},
		{"calm", speed(`"u":"m/s","v":0`), "+0.000s 0@240", ""},
		{"360 is 0", `[{"n":"wind_speed","u":"m/s","v":5},{"n":"wind_direction","u":"deg","v":360}]`, "+0.000s 5@0", ""},
		{"minus zero", speed(`"u":"m/s","v":-0.0`), "+0.000s 0@240", ""},
		{"absolute time", `[{"bn":"m:","bt":1782907190.25,"n":"wind_speed","u":"m/s","v":5},` + dir + `]`, "-9.750s 5@240", ""},
		{"relative time", `[{"bt":-2,"n":"wind_speed","u":"m/s","v":5,"t":0.5},{"n":"wind_direction","u":"deg","v":240,"t":0.5}]`, "-1.500s 5@240", ""},
		{"several times", `[{"bn":"m:","bt":-3,"bu":"m/s","n":"wind_speed","v":5},{"n":"wind_speed","v":6,"t":1},{"n":"wind_direction","u":"deg","v":10},{"n":"wind_direction","u":"deg","v":20,"t":1}]`,
			"-3.000s 5@10; -2.000s 6@20", ""},
		{"two prefixes", `[{"bn":"a:","bu":"m/s","n":"wind_speed","v":5},` + dir + `,{"bn":"b:","n":"wind_speed","v":6},` + dir + `]`, "+0.000s 5@240; +0.000s 6@240", ""},
		{"the ending runs over base name and name", `[{"bn":"m:wind_","n":"speed","u":"m/s","v":5},{"n":"direction","u":"deg","v":1}]`, "+0.000s 5@1", ""},
		{"base value", `[{"bn":"m:","bv":10,"n":"wind_speed","u":"m/s","v":-2.5},` + dir + `,{"bv":0}]`, "+0.000s 7.5@250", ""},
		{"escapes", `[{"bn":"m\u003a","n":"wind\u005fspeed","u":"m\/s","v":5},{"n":"wind_direction","u":"d\u0065g","v":240}]`, "+0.000s 5@240", ""},
		{"other records", `[{"bn":"m:","n":"temperature","u":"Cel","v":8},{"n":"wind_speed","u":"m/s","v":5},` + dir + `,{"n":"label","vs":"x"}]`, "+0.000s 5@240", ""},
		{"unknown fields are passed over", `[{"bn":"m:","x":{"y":[1,{}]},"n":"wind_speed","u":"m/s","v":5},` + dir + `]`, "+0.000s 5@240", ""},
		{"the last of a repeated key", speed(`"u":"m/s","v":1,"v":5`), "+0.000s 5@240", ""},
		{"said twice alike", `[{"n":"wind_speed","u":"m/s","v":5},{"n":"wind_speed","u":"m/s","v":5},` + dir + `]`, "+0.000s 5@240", ""},
		{"exercise", speed(`"u":"m/s","v":5},{"n":"exercise","vb":true`), "+0.000s 5@240 exercise", ""},
		{"exercise with a base name", `[{"bn":"m:","n":"exercise","vb":true},{"n":"wind_speed","u":"m/s","v":5},` + dir + `]`, "+0.000s 5@240 exercise", ""},
		{"exercise plainly false", speed(`"u":"m/s","v":5},{"n":"exercise","vb":false`), "+0.000s 5@240", ""},
		{"exercise as a number", speed(`"u":"m/s","v":5},{"n":"exercise","v":0`), "+0.000s 5@240 exercise", ""},
		{"no wind in it", `[{"n":"m:temperature","u":"Cel","v":8}]`, "", ""},
		{"empty pack", `[]`, "", ""},

		{"speed alone", `[{"n":"wind_speed","u":"m/s","v":5}]`, "", "incomplete"},
		{"times that differ", `[{"n":"wind_speed","u":"m/s","v":5,"t":-1},` + dir + `]`, "", "incomplete x2"},
		{"said twice, differing", `[{"n":"wind_speed","u":"m/s","v":5},{"n":"wind_speed","u":"m/s","v":6},` + dir + `]`, "", "contradiction"},
		{"unit of speed", speed(`"u":"Beaufort","v":5`), "", "units"},
		{"no unit", speed(`"v":5`), "", "units"},
		{"unit of direction", `[{"bu":"m/s","n":"wind_speed","v":5},{"n":"wind_direction","v":240}]`, "", "units"},
		{"unit of gust: the rest comes out", speed(`"u":"m/s","v":5},{"n":"wind_gust","u":"Cel","v":8`), "+0.000s 5@240", "units"},
		{"no value", speed(`"u":"m/s"`), "", "no-value"},
		{"value is true", speed(`"u":"m/s","vb":true`), "", "malformed"},
		{"value is null", speed(`"u":"m/s","v":null`), "", "malformed"},
		{"value is NaN", speed(`"u":"m/s","v":NaN`), "", "malformed"},
		{"value is 1e999", speed(`"u":"m/s","v":1e999`), "", "not-finite"},
		{"value is 1e308", speed(`"u":"m/s","v":1e308`), "", "impossible"},
		{"base value makes it infinite", speed(`"u":"m/s","v":1e308,"bv":1e308`), "", "not-finite impossible"},
		{"negative speed", speed(`"u":"m/s","v":-1`), "", "impossible"},
		{"direction 720", `[{"n":"wind_speed","u":"m/s","v":5},{"n":"wind_direction","u":"deg","v":720}]`, "", "impossible"},
		{"direction -1", `[{"n":"wind_speed","u":"m/s","v":5},{"n":"wind_direction","u":"deg","v":-1}]`, "", "impossible"},
		{"direction 6.29 rad", `[{"n":"wind_speed","u":"m/s","v":5},{"n":"wind_direction","u":"rad","v":6.29}]`, "", "impossible"},
		{"time beyond the calendar", `[{"bt":1e18,"n":"wind_speed","u":"m/s","v":5},` + dir + `]`, "", "bad-time x2"},
		{"one of two is bad", `[{"bn":"a:","bu":"m/s","n":"wind_speed","v":-5},` + dir + `,{"bn":"b:","n":"wind_speed","v":6},` + dir + `]`, "+0.000s 6@240", "impossible"},
		{"must be understood", speed(`"u":"m/s","v":5,"vote_":1`), "", "not-understood"},
		{"must be understood, in the last record", `[{"n":"wind_speed","u":"m/s","v":5},` + dir + `,{"x_":0}]`, "", "not-understood"},
		{"version 0", `[{"bver":0,"n":"a","v":1}]`, "", "not-understood"},
		{"version 9.5", `[{"bver":9.5,"n":"a","v":1}]`, "", "not-understood"},
		{"version appears late", `[{"n":"a","v":1},{"bver":9,"n":"b","v":1}]`, "", "contradiction"},
		{"empty payload", "", "", "malformed"},
		{"cut off", `[{"n":"wind_speed","u":"m/s","v":5`, "", "malformed"},
		{"comma at the end", `[` + dir + `,]`, "", "malformed"},
		{"more behind it", `[` + dir + `] []`, "", "malformed"},
		{"record is a number", `[1]`, "", "malformed"},
		{"number with a leading zero", speed(`"u":"m/s","v":05`), "", "malformed"},
		{"bad escape", `[{"n":"wind\xspeed","v":5}]`, "", "malformed"},
		{"control character in a string", "[{\"n\":\"wind\nspeed\",\"v\":5}]", "", "malformed"},
		{"nested too deep", `[{"x":` + strings.Repeat("[", 40) + strings.Repeat("]", 40) + `}]`, "", "too-large"},
		{"nested as deep as may be", `[{"x":` + strings.Repeat("[", 30) + strings.Repeat("]", 30) + `}]`, "", ""},
	})
}

func TestSenMLLongPack(t *testing.T) {
	// A logger that was cut off sends ten minutes at once.
	var b strings.Builder
	b.WriteString(`[{"bn":"m:","bt":1782906600}`)
	for i := range 600 {
		fmt.Fprintf(&b, `,{"n":"wind_speed","u":"m/s","t":%d,"v":%d.5},{"n":"wind_direction","u":"deg","t":%d,"v":%d}`, i, i%20, i, i%360)
	}
	b.WriteByte(']')
	d := newDecoder(t, sensors.Station{Format: sensors.FormatSenMLJSON})
	got, err := d.Decode(nil, message(b.String()), 0)
	if err != nil || len(got) != 600 {
		t.Fatalf("%d readings, %v; want 600", len(got), err)
	}
	for i, r := range got {
		if r.Speed != float64(i%20)+0.5 || r.From != float64(i%360) || r.Time != noon-600_000+sensors.Instant(i)*sensors.Second {
			t.Fatalf("reading %d is %+v", i, r)
		}
	}
}

func TestInstantOf(t *testing.T) {
	for _, row := range []struct {
		seconds float64
		want    sensors.Instant
		ok      bool
	}{
		{0, noon, true},
		{-1.5, noon - 1500, true},
		{1<<28 - 1, noon + (1<<28-1)*1000, true},
		{1 << 28, (1 << 28) * 1000, true},
		{1276020076.001, 1276020076001, true}, // its float64 lies below
		{lastSecond, lastSecond * 1000, true},
		{lastSecond + 1, 0, false},
		{-2e9, 0, false}, // before 1970
		{math.Inf(1), 0, false},
		{math.NaN(), 0, false},
	} {
		got, ok := instantOf(row.seconds, noon)
		if ok != row.ok || (ok && got != row.want) {
			t.Errorf("instantOf(%v) = %d, %v; want %d, %v", row.seconds, got, ok, row.want, row.ok)
		}
	}
}
