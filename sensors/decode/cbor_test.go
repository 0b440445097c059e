package decode

import (
	"encoding/hex"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"strings"
	"testing"

	"github.com/fxamacker/cbor/v2"

	"sockline/sensors"
)

// labels is table 4 of RFC 8428 (from memory), written a second time.
func labels() map[string]int {
	return map[string]int{"bver": -1, "bn": -2, "bt": -3, "bu": -4, "bv": -5, "bs": -6,
		"n": 0, "u": 1, "v": 2, "vs": 3, "vb": 4, "s": 5, "t": 6, "ut": 7, "vd": 8}
}

// inCBOR writes a SenML pack in JSON as one in CBOR, with the library's
// encoder; numbers as labels, or words.
func inCBOR(tb testing.TB, pack []byte, numbers bool) []byte {
	tb.Helper()
	var records []any
	if err := json.Unmarshal(pack, &records); err != nil {
		tb.Fatal(err)
	}
	out := make([]any, len(records))
	for i, item := range records {
		fields, ok := item.(map[string]any)
		if !ok {
			out[i] = item
			continue
		}
		m := map[any]any{}
		for key, value := range fields {
			var label any = key
			if n, known := labels()[key]; known && numbers {
				label = n
			}
			switch v := value.(type) {
			case float64:
				if v == math.Trunc(v) && math.Abs(v) < 1e15 {
					value = int64(v) // as short as it goes, like an encoder in a mast
				}
			case string:
				if key == "vd" {
					value = []byte(v)
				}
			}
			m[label] = value
		}
		out[i] = m
	}
	b, err := cbor.Marshal(out)
	if err != nil {
		tb.Fatal(err)
	}
	return b
}

// The packs that were resolved by another program mean the same in CBOR.
func TestCBORVectors(t *testing.T) {
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
	d := newDecoder(t, sensors.Station{Format: sensors.FormatSenMLCBOR})
	now := sensors.Instant(table.Now * 1000)
	for _, row := range table.Cases {
		for _, numbers := range []bool{true, false} {
			t.Run(fmt.Sprint(row.Name, numbers), func(t *testing.T) {
				got, ok := resolvedBy(d, d.recordsCBOR, inCBOR(t, row.Pack, numbers), now)
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
	}
	for _, row := range table.Reject {
		t.Run(row.Why, func(t *testing.T) {
			if !json.Valid(row.Pack) {
				return
			}
			var list []any
			if json.Unmarshal(row.Pack, &list) != nil {
				return // an object where a pack is expected: TestCBORRefuses has it
			}
			if got, ok := resolvedBy(d, d.recordsCBOR, inCBOR(t, row.Pack, true), now); ok || len(d.faults) != 1 {
				t.Errorf("accepted as %v (%v)", got, d.faults)
			}
		})
	}
}

// Packs written by hand after RFC 8949 appendix A (from memory): 83 is an array
// of three, a2 a map of two, bf and 9f have no length, ff ends them.
func TestCBORWind(t *testing.T) {
	const (
		speed     = "006a77696e645f7370656564" + "01636d2f73" // 0: "wind_speed", 1: "m/s"
		direction = "006e77696e645f646972656374696f6e" + "0163646567"
	)
	wind := func(v, from string) string { return "82a3" + speed + "02" + v + "a3" + direction + "02" + from }
	for _, row := range []struct{ name, payload, want, why string }{
		{"integers", wind("05", "18f0"), "+0.000s 5@240", ""},
		{"half floats", wind("f94500", "f95b80"), "+0.000s 5@240", ""},                       // 5.0, 240.0
		{"single floats", wind("fa40a00000", "fa43700000"), "+0.000s 5@240", ""},             // the same
		{"double floats", wind("fb4014000000000000", "18f0"), "+0.000s 5@240", ""},           // the same
		{"decimal fraction", wind("c48220190283", "c482211909f9"), "+0.000s 64.3@25.53", ""}, // 643e-1, 2553e-2
		{"negative mantissa", wind("c4822038ff", "00"), "", "impossible incomplete"},         // -256e-1
		{"a small half", wind("f90001", "00"), "+0.000s 5.96046e-08@0", ""},                  // 2^-24
		{"infinite", wind("f97c00", "00"), "", "not-finite"},
		{"NaN", wind("fb7ff8000000000000", "00"), "", "not-finite"},
		{"negative", wind("20", "00"), "", "impossible"},
		{"720 degrees", wind("05", "1902d0"), "", "impossible"},
		{"1e308", wind("fb7fe1ccf385ebc8a0", "00"), "", "impossible"},
		{"null", wind("f6", "00"), "", "malformed"},
		{"text for a number", wind("6135", "00"), "", "malformed"},
		{"without lengths", "9fbf" + speed + "0205ffbf" + direction + "0201ffff", "+0.000s 5@1", ""},
		{"says that it is CBOR", "d9d9f7" + wind("05", "18f0"), "+0.000s 5@240", ""},
		{"other tag on a number", wind("c105", "00"), "", "malformed"},
		{"extension passed over", strings.Replace(wind("05", "18f0"), "82a3", "82a4617882018102", 1), "+0.000s 5@240", ""},
		{"extension that must be understood", strings.Replace(wind("05", "18f0"), "82a3", "82a462785f01", 1), "", "not-understood"},
		{"unknown number", strings.Replace(wind("05", "18f0"), "82a3", "82a41863"+"01", 1), "+0.000s 5@240", ""},
		{"text in pieces", "81a2007f6461ff" + "0205", "", "malformed"},
		{"text in two pieces", "81a2007f616161" + "62ff" + "0205", "", "malformed"},
		{"name is not UTF-8", "81a20062c3280205", "", "malformed"},
		{"a word marks an exercise", "83a3" + speed + "0205a3" + direction + "0201" + "a2006865786572636973650" + "4f5", "+0.000s 5@1 exercise", ""},
		{"a map", "a1" + "0205", "", "malformed"},
		{"half of it", wind("05", "18f0")[:40], "", "malformed"},
		{"more behind it", wind("05", "18f0") + "00", "", "malformed"},
		{"empty", "", "", "malformed"},
		{"JSON", hex.EncodeToString([]byte(benchSenML)), "", "malformed"},
		{"empty pack", "80", "", ""},
		{"cut off in a string", "81a1617878", "", "malformed"},
		{"deeper than looked at", strings.Repeat("81", 60) + "00", "", "too-large"},
		{"array of 2^63", "9b8000000000000000", "", "malformed"},
	} {
		t.Run(row.name, func(t *testing.T) {
			payload, err := hex.DecodeString(row.payload)
			if err != nil {
				t.Fatal(err)
			}
			d := newDecoder(t, sensors.Station{Format: sensors.FormatSenMLCBOR})
			got, err := d.Decode(nil, message(string(payload)), 0)
			if show(got) != row.want || !strings.HasPrefix(row.why, reasons(err)) || (reasons(err) == "" && row.why != "") {
				t.Errorf("got %q, %v; want %q, %q", show(got), err, row.want, row.why)
			}
		})
	}
}

// A station that was given the wrong one of the two formats is told the other.
func TestFormatsExchanged(t *testing.T) {
	for _, row := range []struct {
		format  sensors.Format
		payload string
		phrase  string
	}{
		{sensors.FormatSenMLJSON, string(inCBOR(t, []byte(benchSenML), true)), `would be "senml+cbor"`},
		{sensors.FormatSenMLCBOR, benchSenML, `would be "senml+json"`},
	} {
		_, err := newDecoder(t, sensors.Station{Format: row.format}).Decode(nil, message(row.payload), 0)
		if reasons(err) != "malformed" || !strings.Contains(err.Error(), row.phrase) {
			t.Errorf("%s: %v", row.format, err)
		}
	}
}

// FuzzSenMLCBOR holds the CBOR reader to the library's and, by way of the
// library, to the reader of JSON.
func FuzzSenMLCBOR(f *testing.F) {
	for _, seed := range []string{
		benchSenML, `[]`, `[{"n":"wind_speed","u":"kt","v":10,"t":-3},{"n":"wind_direction","u":"rad","v":1,"t":-3}]`,
		`[{"bn":"a:","bt":1782907000,"bu":"m/s","bv":1,"n":"wind_speed","v":1},{"n":"wind_direction","u":"deg","v":240},{"n":"exercise","vb":true}]`,
		`[{"bver":10,"n":"x","vs":"é"},{"n":"y","vd":"aGk"},{"n":"z","s":1,"ut":5}]`, `[{"n":"a","x_":1}]`,
	} {
		f.Add(inCBOR(f, []byte(seed), true))
		f.Add(inCBOR(f, []byte(seed), false))
	}
	f.Add([]byte("\x9f\xbf\xff\xff"))
	d := newDecoder(f, sensors.Station{Format: sensors.FormatSenMLCBOR})
	mode, err := cbor.DecOptions{MaxNestedLevels: MaxDepth}.DecMode()
	if err != nil {
		f.Fatal(err)
	}
	f.Fuzz(func(t *testing.T, payload []byte) {
		readings, list := decodeSound(t, d, payload)
		valid := mode.Wellformed(payload) == nil
		if !valid && (len(list) == 0 || len(readings) > 0) {
			t.Fatalf("not CBOR, but %v, %v", readings, list)
		}
		if len(readings) == 0 {
			return
		}
		document, ok := fromCBOR(mode, payload)
		if !ok {
			return // duplicate labels and tags are read differently; decodeSound has looked
		}
		winds := oracleWinds(document)
		for _, r := range readings {
			if key := fmt.Sprint(int64(r.Time), " ", r.Speed, " ", r.From); !winds[key] {
				t.Fatalf("%x: %s is none of %v", payload, key, winds)
			}
		}
	})
}

// fromCBOR reads a pack with the library and names its fields as in JSON. ok
// is false for what JSON has no word for.
func fromCBOR(mode cbor.DecMode, payload []byte) (document any, ok bool) {
	var records []map[any]any
	if mode.Unmarshal(payload, &records) != nil {
		return nil, false
	}
	words := map[string]string{}
	for word, n := range labels() {
		words[fmt.Sprint(n)] = word
	}
	var list []any
	for _, fields := range records {
		m := map[string]any{}
		for key, value := range fields {
			label, isText := key.(string)
			if !isText {
				label = words[fmt.Sprint(key)]
			}
			if _, twice := m[label]; twice {
				return nil, false
			}
			switch v := value.(type) {
			case uint64:
				value = json.Number(fmt.Sprint(v))
			case int64:
				value = json.Number(fmt.Sprint(v))
			case float64:
				value = json.Number(fmt.Sprint(v))
			case string, bool, nil:
			default:
				return nil, false
			}
			m[label] = value
		}
		list = append(list, m)
	}
	return list, true
}
