package decode

import (
	"math"
	"math/rand/v2"
	"strconv"
	"testing"

	"sockline/sensors"
)

func TestNumber(t *testing.T) {
	for _, row := range []struct {
		text          string
		strict, loose bool // taken whole
	}{
		{"0", true, true}, {"-0", true, true}, {"7", true, true}, {"6.43", true, true}, {"-12.5", true, true},
		{"017", false, true}, {"02.91", false, true}, {"+3", false, true}, {".5", false, true}, {"5.", false, true},
		{"1e3", true, false}, {"1E+3", true, false}, {"2.5e-3", true, false}, {"1e400", true, false},
		{"1e", false, false}, {"1e+", false, false}, {"-", false, false}, {".", false, false}, {"", false, false},
		{"--1", false, false}, {"1.2.3", false, false}, {"1_0", false, false}, {"0x1", false, false}, {"١", false, false},
		{"9007199254740993", true, true}, {"12345678901234567890", true, true},
		{"0.1000000000000000055511151231257827", true, true},
		{"0000000000000000000000000000001", false, true},
		{"1.00000000000000000000000000000000000000000001", true, true},
	} {
		for _, strict := range []bool{true, false} {
			want := row.loose
			if strict {
				want = row.strict
			}
			value, end, ok := number([]byte(row.text), 0, strict)
			if whole := ok && end == len(row.text); whole != want {
				t.Errorf("number(%q, strict %v) taken whole: %v, want %v", row.text, strict, whole, want)
			} else if whole {
				// strconv rounds correctly by its own tests.
				if right, _ := strconv.ParseFloat(row.text, 64); value != right {
					t.Errorf("number(%q) = %v, want %v", row.text, value, right)
				}
			}
		}
	}
}

func TestNumberRoundsCorrectly(t *testing.T) {
	source := rand.New(rand.NewPCG(1, 2))
	for range 20000 {
		text := strconv.FormatFloat(math.Float64frombits(source.Uint64()), 'g', 1+source.IntN(20), 64)
		if source.IntN(2) == 0 {
			text = strconv.FormatFloat(source.NormFloat64()*100, 'f', source.IntN(22), 64)
		}
		want, err := strconv.ParseFloat(text, 64)
		if err != nil || math.IsNaN(want) || math.IsInf(want, 0) {
			continue
		}
		if got, end, ok := number([]byte(text), 0, true); ok && end == len(text) && got != want {
			t.Fatalf("number(%q) = %v, want %v", text, got, want)
		}
	}
}

func TestNumeral(t *testing.T) {
	for text, want := range map[string]Reason{
		"5": "", " 5.5 ": "", "": NoValue, "  ": NoValue, "nan": NotFinite, "-Infinity": NotFinite,
		"+INF": NotFinite, "five": Malformed, "5 kt": Malformed, "1e2": Malformed,
	} {
		if _, got := numeral([]byte(text)); got != want {
			t.Errorf("numeral(%q): %q, want %q", text, got, want)
		}
	}
}

func TestRFC3339(t *testing.T) {
	// noon is 2026-07-01T12:00:00Z; the rest by hand from RFC 3339 section 5.
	for _, row := range []struct {
		text string
		want sensors.Instant
		ok   bool
	}{
		{"2026-07-01T12:00:00Z", noon, true},
		{"2026-07-01t12:00:00z", noon, true},
		{"2026-07-01 12:00:00Z", noon, true},
		{"2026-07-01T12:00:00.120Z", noon + 120, true},
		{"2026-07-01T12:00:00.5Z", noon + 500, true},
		{"2026-07-01T12:00:00.1209999Z", noon + 120, true},
		{"2026-07-01T13:30:00+01:30", noon, true},
		{"2026-07-01T11:00:00-01:00", noon, true},
		{"2026-07-02T00:00:00+12:00", noon, true},
		{"2026-07-01T12:00:00-00:00", noon, true},
		{"2016-12-31T23:59:60Z", 1483228800_000, true}, // a leap second that was; 2017-01-01T00:00:00Z
		{"2024-02-29T00:00:00Z", 1709164800_000, true},
		{"2026-02-29T00:00:00Z", 0, false},
		{"2026-04-31T00:00:00Z", 0, false},
		{"2026-07-01T12:00:00", 0, false},
		{"2026-07-01T12:00Z", 0, false},
		{"2026-07-01T24:00:00Z", 0, false},
		{"2026-13-01T12:00:00Z", 0, false},
		{"2026-07-01T12:00:61Z", 0, false},
		{"2026-07-01T12:00:00.Z", 0, false},
		{"2026-07-01T12:00:00+0100", 0, false},
		{"2026-07-01T12:00:00+24:00", 0, false},
		{"2026-07-01T12:00:00Zulu", 0, false},
		{"1969-12-31T23:59:59Z", 0, false},
		{"1970-01-01T00:00:00+01:00", 0, false},
		{"20260701T120000Z", 0, false},
		{"2026-07-01T12:0a:00Z", 0, false},
		{"", 0, false},
	} {
		if got, ok := rfc3339([]byte(row.text)); ok != row.ok || (ok && got != row.want) {
			t.Errorf("rfc3339(%q) = %v, %v; want %v, %v", row.text, got, ok, row.want, row.ok)
		}
	}
}
