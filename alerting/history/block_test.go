package history

import (
	"bytes"
	"encoding/hex"
	"math"
	"math/rand/v2"
	"reflect"
	"strings"
	"testing"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

func TestForms(t *testing.T) {
	// Numbers that a decoder would have computed at run time, not the compiler.
	knots, kmh := func(v float64) float64 { return v * quantity.Knot }, func(v float64) float64 { return v * quantity.KilometrePerHour }
	// The numbers follow from the doc of form: the smallest whole number that
	// gives the value back in that form.
	for _, row := range []struct {
		name   string
		v      float64
		prefer form
		want   form
		n      int64
	}{
		{"hundredths stay hundredths", 5.1, formHundredth, formHundredth, 510},
		{"a whole number", 7, formRaw, formOne, 7},
		{"a tenth", 243.7, formRaw, formTenth, 2437},
		{"a thousandth", 3.217, formTenth, formThousandth, 3217},
		{"12.3 kt in m/s", knots(12.3), formHundredth, formTenthKnot, 123},
		{"12.34 kt in m/s", knots(12.34), formHundredth, formHundredthKnot, 1234},
		{"18.7 km/h in m/s", kmh(18.7), formTenth, formTenthKmh, 187},
		{"negative", -0.5, formTenth, formTenth, -5},
		{"the zero with a sign", math.Copysign(0, -1), formTenth, formRaw, 0},
		{"the zero", 0, formTenth, formTenth, 0},
		{"the square root of two", math.Sqrt2, formTenth, formRaw, 0},
		{"not a number", math.NaN(), formTenth, formRaw, 0},
		{"infinite", math.Inf(1), formTenth, formRaw, 0},
		{"huge", 1e300, formTenth, formRaw, 0},
	} {
		if f, n := choose(row.v, row.prefer); f != row.want || n != row.n {
			t.Errorf("%s: form %d, number %d; want %d, %d", row.name, f, n, row.want, row.n)
		}
	}
}

// sameReading compares bit for bit: NaN equals itself, -0 differs from 0.
func sameReading(a, b sensors.Reading) bool {
	bits := math.Float64bits
	if bits(a.Speed) != bits(b.Speed) || bits(a.From) != bits(b.From) || bits(a.Gust) != bits(b.Gust) {
		return false
	}
	a.Speed, a.From, a.Gust, b.Speed, b.From, b.Gust = 0, 0, 0, 0, 0, 0
	return a == b
}

// anyReading draws a reading of every sort, sane and absurd.
func anyReading(rng *rand.Rand, step sensors.Instant) sensors.Reading {
	value := func() float64 {
		switch rng.IntN(8) {
		case 0:
			return math.Float64frombits(rng.Uint64())
		case 1:
			return rng.NormFloat64() * 10
		case 2:
			return float64(rng.IntN(800)) / 10 * quantity.Knot
		case 3:
			return float64(rng.IntN(8000)) / 1000
		case 4:
			return 0
		}
		return float64(rng.IntN(36000)) / 100
	}
	r := sensors.Reading{
		Station: rng.IntN(40), Time: step - sensors.Instant(rng.IntN(1000)), Speed: value(), From: value(),
		HasGust: rng.IntN(2) == 0, Exercise: rng.IntN(9) == 0, Retained: rng.IntN(9) == 0,
	}
	r.Arrival = r.Time + sensors.Instant(rng.IntN(3000)-500)
	if r.HasGust || rng.IntN(9) == 0 {
		r.Gust = value()
	}
	if rng.IntN(20) == 0 {
		r.Station, r.Time, r.Arrival = rng.Int()-rng.Int(), sensors.Instant(rng.Uint64()), sensors.Instant(rng.Uint64())
	}
	return r
}

func TestReadingsRoundTrip(t *testing.T) {
	const seed = 11
	rng := rand.New(rand.NewPCG(seed, 0))
	for round := range 3000 {
		step := sensors.Instant(rng.Int64N(1<<42)) * sensors.Second / 1000
		rs := make([]sensors.Reading, rng.IntN(60))
		for i := range rs {
			rs[i] = anyReading(rng, step)
		}
		c := cursorAt(appendReadings(nil, step, rs))
		got := c.readings(step, nil)
		if c.Bad || len(c.Left) != 0 || len(got) != len(rs) {
			t.Fatalf("seed %d round %d: %d readings became %d, bad %v, %d bytes left", seed, round, len(rs), len(got), c.Bad, len(c.Left))
		}
		for i := range rs {
			if !sameReading(rs[i], got[i]) {
				t.Fatalf("seed %d round %d: reading %d\n was %+v\n is  %+v", seed, round, i, rs[i], got[i])
			}
		}
	}
}

func TestSealFindsEveryFlippedBit(t *testing.T) {
	step := start
	key, body := stepKey(step), appendReadings([]byte{1}, step, readingsOf(step, 3))
	sealed := seal(key, body)
	for i := range len(sealed) * 8 {
		bad := append([]byte(nil), sealed...)
		bad[i/8] ^= 1 << (i % 8)
		if _, err := unseal(key, bad); err == nil {
			t.Fatalf("bit %d flipped in the value: not found", i)
		}
	}
	for i := range len(key) * 8 {
		bad := append([]byte(nil), key...)
		bad[i/8] ^= 1 << (i % 8)
		if _, err := unseal(bad, sealed); err == nil {
			t.Fatalf("bit %d flipped in the key: not found", i)
		}
	}
	for n := range len(sealed) {
		if _, err := unseal(key, sealed[:n]); err == nil {
			t.Fatalf("cut to %d bytes: not found", n)
		}
	}
}

// TestFormatExamples holds the examples of format.md, which come from an
// independent program: what is on disk must stay readable.
func TestFormatExamples(t *testing.T) {
	unhex := func(s string) []byte {
		b, err := hex.DecodeString(strings.Join(strings.Fields(s), ""))
		if err != nil {
			t.Fatal(err)
		}
		return b
	}
	const step sensors.Instant = 1782907200000
	key := unhex("80 00 00 00 6a 45 01 40")
	value := unhex(`01 01 00 02 01 8a 26 f4 03 f0 01 fc 07 8a 26 aa 0b 01 0a 20 00 a0 01 ce 07 c0 25 bf 48 be ae`)
	rs := []sensors.Reading{
		{Station: 0, Time: step - 250, Arrival: step - 130, Speed: 5.1, From: 243.7, Gust: 7.25, HasGust: true},
		{Station: 1, Time: step, Arrival: step + 80, Speed: 4.87, From: 240},
	}
	if got := seal(stepKey(step), appendReadings([]byte{1, 0}, step, rs)); !bytes.Equal(stepKey(step), key) || !bytes.Equal(got, value) {
		t.Errorf("step written as % x under % x", got, stepKey(step))
	}
	st, err := decodeStep(rawStep{key: key, value: value}, map[uint64][]string{1: {"far07", "mid"}})
	if err != nil || st.At != step || !reflect.DeepEqual(st.Readings, rs) {
		t.Errorf("step read as %+v, %v", st, err)
	}

	frameExample(t, unhex, step)

	// Of the earlier version, which is still read, and as it is written now.
	before := unhex(`01 04 00 00 01 9f 1d 8c e2 00 7b 22 76 65 72 73 69 6f 6e 22 3a 22 31 22 7d
		46 be c9 d3 0e ac 59 54 0e 7b 3c 38 6f 21 37 93 4f da 9b ae 73 61 c4 db ed 6a 23 af 43 11 58 bd`)
	record := unhex(`02 04 00 00 01 9f 1d 8c e2 00 0f 7b 22 76 65 72 73 69 6f 6e 22 3a 22 31 22 7d
		94 c1 a9 51 a7 3d 4e da c9 52 44 1a b7 dc 2e d3 a8 cf 86 88 43 b3 e7 60 5a e1 25 a5 b5 04 b2 0c`)
	if got, after := (head{}).next(draft{kind: KindStart, at: step, payload: []byte(`{"version":"1"}`)}); !bytes.Equal(got, record) || after.seq != 1 {
		t.Errorf("record written as % x", got)
	}
	for _, value := range [][]byte{before, record} {
		r, err := parseRecord(seqKey(1), value)
		if err != nil || r.Seq != 1 || r.Kind != KindStart || r.At != step || string(r.Payload) != `{"version":"1"}` || !r.follows(head{}.hash) {
			t.Errorf("record read as %+v, %v", r, err)
		}
	}
	note := unhex(`02 0a 00 00 01 9f 1d 8c e5 e8 6a 7b 22 6f 63 63 75 72 72 65 6e 63 65 22 3a 22 61 22 2c 22 77 68 6f 22 3a 7b 22 63 6f 6d
		6d 69 74 6d 65 6e 74 22 3a 22 32 36 38 64 38 35 32 31 65 30 33 64 65 61 35 37 62 30 34 62 36 31 62 63 61 65 63 32 33 34
		62 63 65 34 39 34 65 38 65 38 37 30 38 37 37 38 38 30 31 38 34 32 34 35 62 33 32 31 38 37 33 39 36 64 22 7d 7d 01 02 03
		04 05 06 07 08 09 0a 0b 0c 0d 0e 0f 10 02 49 6f 12 b1 b6 7d 84 45 7d a1 72 d5 d2 c9 a0 3a 67 87 ab d5 0e 60 ef 23 39 eb
		05 20 2f 72 2d ad c7 00`)
	r, err := parseRecord(seqKey(2), note)
	first, _ := parseRecord(seqKey(1), record)
	if err != nil || r.Kind != KindAcknowledge || string(r.Payload) != `{"occurrence":"a","who":"Io"}` || !r.follows(first.Hash) {
		t.Errorf("record of somebody read as %+v, %s, %v", r, r.Payload, err)
	}
}

// frameExample is the third example of format.md.
func frameExample(t *testing.T, unhex func(string) []byte, step sensors.Instant) {
	t.Helper()
	var steps []Step
	for i, v := range [][2]float64{{5.1, 359}, {5.2, 0}, {5, 358}} {
		at := step + sensors.Instant(i)*sensors.Second
		steps = append(steps, Step{At: at, Stations: []string{"far07"},
			Readings: []sensors.Reading{{Time: at, Arrival: at + 80, Speed: v[0], From: v[1]}}})
	}
	want := []keyed{
		{unhex("00 a8 c0 00 00"), unhex("01 01 03 03 01 00 00 94 51 9e 3d")},
		{unhex("00 a8 c0 00 01"), unhex("01 03 00 00 00 d0 0f 00 a0 01 01 40 64 b0 00 81 ce 05 94 ae a9 e8 47")},
	}
	if got := encodeWindow(1, steps); !reflect.DeepEqual(got, want) {
		t.Errorf("the window is written as % x", got)
	}
	if !givesBack(want, steps, []string{"far07"}) {
		t.Error("the window of the example is not read as it was")
	}
}

func FuzzReadings(f *testing.F) {
	f.Add(appendReadings(nil, start, readingsOf(start, 2)))
	f.Add([]byte{0xff, 0xff, 0xff, 0xff, 0x0f, 1, 0, 0})
	f.Fuzz(func(t *testing.T, b []byte) {
		c := cursorAt(b)
		rs := c.readings(start, nil)
		if c.Bad {
			return
		}
		// What was read can be written and read again, whatever it was.
		again := cursorAt(appendReadings(nil, start, rs))
		got := again.readings(start, nil)
		if again.Bad || len(got) != len(rs) {
			t.Fatalf("%d readings became %d", len(rs), len(got))
		}
		for i := range rs {
			if !sameReading(rs[i], got[i]) {
				t.Fatalf("was %+v, is %+v", rs[i], got[i])
			}
		}
	})
}

func TestStepFor(t *testing.T) {
	st := Step{Stations: []string{"far07", "mid", "gone"}, Readings: []sensors.Reading{{Station: 0}, {Station: 1}, {Station: 2}, {Station: 1, Speed: 3}}}
	for _, row := range []struct {
		name string
		ids  []string
		want []sensors.Reading
	}{
		{"the same list", []string{"far07", "mid", "gone"}, st.Readings},
		{"one gone, others moved", []string{"mid", "new", "far07"}, []sensors.Reading{{Station: 2}, {Station: 0}, {Station: 0, Speed: 3}}},
		{"none left", []string{"new"}, []sensors.Reading{}},
	} {
		if got := st.For(row.ids); !reflect.DeepEqual(got, row.want) {
			t.Errorf("%s: %+v, want %+v", row.name, got, row.want)
		}
	}
}

func TestKeysOrder(t *testing.T) {
	instants := []sensors.Instant{math.MinInt64, -86400000, -1000, 0, 1000, start, start + 1000, math.MaxInt64}
	for i, at := range instants {
		if keyInstant(instantKey(at)) != at {
			t.Errorf("%d does not come back from its key", at)
		}
		if i > 0 && string(instantKey(instants[i-1])) >= string(instantKey(at)) {
			t.Errorf("the key of %d does not sort before that of %d", instants[i-1], at)
		}
	}
}
