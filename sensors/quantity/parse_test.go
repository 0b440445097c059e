package quantity

import (
	"math"
	"strings"
	"testing"
	"time"
)

func near(got, want, tolerance float64) bool { return math.Abs(got-want) <= tolerance }

func TestParse(t *testing.T) {
	// Sources of want: definitions of the units (knot 1852 m/h, foot 0.3048 m,
	// mile 1609.344 m), worked by hand; tolerance is the rounding of a product.
	speed, length, angle := ParseSpeed, ParseLength, ParseAngle
	for _, row := range []struct {
		text  string
		parse func(string) (float64, error)
		want  float64
	}{
		{"10 kt", speed, 5.144444444444444},
		{"10 kn", speed, 5.144444444444444},
		{"5 m/s", speed, 5},
		{"18 km/h", speed, 5},
		{"12 mph", speed, 5.36448},
		{"30 ft/s", speed, 9.144},
		{" 7.5  m/s ", speed, 7.5},
		{"7.5m/s", speed, 7.5},
		{"-2 kt", speed, -1.0288888888888889},
		{"5 km", length, 5000},
		{"18 m", length, 18},
		{"500 ft", length, 152.4},
		{"1 NM", length, 1852},
		{"3 deg", angle, 3},
		{"-6.1 deg", angle, -6.1},
		{"0.05 rad", angle, 2.864788975654116},
		{"+1.5 deg", angle, 1.5},
	} {
		got, err := row.parse(row.text)
		if err != nil {
			t.Errorf("%q: %v", row.text, err)
		} else if !near(got, row.want, 1e-12*math.Max(1, math.Abs(row.want))) {
			t.Errorf("%q = %v, want %v", row.text, got, row.want)
		}
	}
}

func TestParseDuration(t *testing.T) {
	for text, want := range map[string]time.Duration{
		"1 s": time.Second, "500 ms": 500 * time.Millisecond, "2 min": 2 * time.Minute,
		"24 h": 24 * time.Hour, "400 days": 400 * 24 * time.Hour, "1 day": 24 * time.Hour,
		"0 s": 0, "0.1 s": 100 * time.Millisecond, "100000 days": 100000 * 24 * time.Hour,
	} {
		if got, err := ParseDuration(text); err != nil || got != want {
			t.Errorf("%q = %v, %v, want %v", text, got, err, want)
		}
	}
}

func TestParseRefuses(t *testing.T) {
	speed := func(s string) error { _, err := ParseSpeed(s); return err }
	length := func(s string) error { _, err := ParseLength(s); return err }
	angle := func(s string) error { _, err := ParseAngle(s); return err }
	duration := func(s string) error { _, err := ParseDuration(s); return err }
	for _, row := range []struct {
		text   string
		parse  func(string) error
		phrase string // must be in the message
	}{
		{"", speed, "a plain decimal number and a unit"},
		{"kt", speed, "a plain decimal number and a unit"},
		{"10", speed, "has no unit"},
		{"10 knots", speed, `"knots" is not a unit of speed; expected m/s, km/h, kt`},
		{"10 KT", speed, "not a unit"},
		{"1e3 kt", speed, `"e3 kt" is not a unit`},
		{"1_000 kt", speed, "not a unit"},
		{"1,5 kt", speed, "not a unit"},
		{"0x10 kt", speed, "not a unit"},
		{".5 kt", speed, "a plain decimal number"},
		{"5. kt", speed, "a plain decimal number"},
		{"NaN kt", speed, "a plain decimal number"},
		{"inf kt", speed, "a plain decimal number"},
		{"--5 kt", speed, "a plain decimal number"},
		{strings.Repeat("9", 400) + " kt", speed, "too large"},
		{strings.Repeat("9", 307) + " km", length, "too large"},
		{"5 kt", length, `"kt" is not a unit of length; expected m, km, ft or NM`},
		{"3 m", angle, `"m" is not a unit of angle; expected deg or rad`},
		{"-1 s", duration, "is negative"},
		{"1e9 h", duration, "not a unit"},
		{"200000 days", duration, "too long"},
		{"10 m", duration, `"m" is not a unit of length of time; expected ms, s, min, h or days`},
	} {
		if err := row.parse(row.text); err == nil {
			t.Errorf("%.20q was accepted", row.text)
		} else if !strings.Contains(err.Error(), row.phrase) {
			t.Errorf("%.20q: %q does not say %q", row.text, err, row.phrase)
		}
	}
}

func TestFactors(t *testing.T) {
	// Values of GNU units 2.22, as printed to 12 digits.
	for _, row := range []struct {
		name      string
		got, want float64
	}{
		{"kt in m/s", Knot, 0.514444444444},
		{"m/s in kt", Knots(1), 1.94384449244},
		{"kt in ft/min", 60 * Feet(Knot), 101.268591426},
		{"mile/h in m/s", MilePerHour, 0.44704},
		{"kt/1000 ft in 1/s", KnotPer1000Foot, 0.0016878098571},
	} {
		if !near(row.got, row.want, 1e-11*row.want) {
			t.Errorf("%s = %.13g, want %.13g", row.name, row.got, row.want)
		}
	}
	for name, want := range map[string]float64{"kn": Knot, "kt": Knot, "m/s": 1, "km/h": 1 / 3.6, "mph": 0.44704, "ft/s": 0.3048} {
		if got, ok := SpeedUnit(name); !ok || got != want {
			t.Errorf("SpeedUnit(%q) = %v, %v, want %v", name, got, ok, want)
		}
	}
	for _, name := range []string{"", "knots", "M/S", "deg", "Beaufort"} {
		if _, ok := SpeedUnit(name); ok {
			t.Errorf("SpeedUnit(%q) is known", name)
		}
	}
	if _, ok := AngleUnit("grad"); ok {
		t.Error(`AngleUnit("grad") is known`)
	}
}

func TestComponents(t *testing.T) {
	// Worked by hand: sine and cosine of 30 and 40 degrees times the speed.
	for _, row := range []struct {
		name                 string
		from, kt, bearing    float64
		head, crossFromRight float64
	}{
		{"30 degrees off to the right", 210, 20, 180, 17.321, 10.000},
		{"40 degrees off to the left", 320, 15, 360, 11.491, -9.642},
		{"straight behind", 90, 12, 270, -12, 0},
		{"calm", 0, 0, 70, 0, 0},
	} {
		v := FromDirection(row.kt*Knot, row.from)
		if got := Knots(v.Headwind(row.bearing)); !near(got, row.head, 5e-4) {
			t.Errorf("%s: headwind %.4f kt, want %.3f", row.name, got, row.head)
		}
		if got := Knots(v.CrosswindFromRight(row.bearing)); !near(got, row.crossFromRight, 5e-4) {
			t.Errorf("%s: crosswind %.4f kt, want %.3f", row.name, got, row.crossFromRight)
		}
	}
}

func TestDirectionRoundTrip(t *testing.T) {
	// The convention: a west wind blows toward the east; u = -S sin DD.
	if v := FromDirection(10, 270); !near(v.East, 10, 1e-12) || !near(v.North, 0, 1e-12) {
		t.Errorf("west wind = %+v, want East 10", v)
	}
	for from := 0.0; from < 360; from += 0.5 {
		v := FromDirection(8, from)
		back := math.Mod(v.From()-from+540, 360) - 180
		if !near(back, 0, 1e-10) || !near(v.Speed(), 8, 1e-12) {
			t.Fatalf("from %v: back %v, speed %v", from, v.From(), v.Speed())
		}
	}
	for _, row := range []struct{ in, want float64 }{
		{360, 0}, {-1e-20, 0}, {-90, 270}, {725, 5}, {0, 0}, {359.9, 359.9},
	} {
		if got := NormalizeDegrees(row.in); !near(got, row.want, 1e-12) || got >= 360 {
			t.Errorf("NormalizeDegrees(%v) = %v, want %v", row.in, got, row.want)
		}
	}
	if got := (Vector{}).From(); got != 0 {
		t.Errorf("direction of calm = %v, want 0", got)
	}
}
