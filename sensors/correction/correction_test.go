package correction

import (
	"math"
	"testing"

	"sockline/sensors"
)

func near(t *testing.T, what string, got, want, within float64) {
	t.Helper()
	if !(math.Abs(got-want) <= within) {
		t.Errorf("%s: %.6f, want %.6f", what, got, want)
	}
}

// The values were worked out apart from this program, to the digits shown.
func TestLogLaw(t *testing.T) {
	near(t, "6 m to 10 m over open ground", LogLaw(6, 10, 0.03), 1.09641, 5e-6)
	near(t, "3 m to 10 m over open ground", LogLaw(3, 10, 0.03), 1.26144, 5e-6)
	near(t, "there and back", LogLaw(6, 10, 0.1)*LogLaw(10, 6, 0.1), 1, 1e-15)
}

// Factors at 10 m by class, worked out apart from this program.
func TestOpenExposure(t *testing.T) {
	want := map[string]float64{
		"sea": 0.8908, "smooth": 0.9444, "open": 1, "roughly-open": 1.0616, "rough": 1.1355, "very-rough": 1.2214, "closed": 1.3590,
	}
	for name, factor := range want {
		z0, ok := ClassLength(name)
		if !ok {
			t.Fatalf("there is no class %s", name)
		}
		near(t, name, OpenExposure(10, z0), factor, 5e-5)
	}
	if _, ok := ClassLength("moon"); ok {
		t.Error("there is a class that nobody named")
	}
}

func TestFactorBySector(t *testing.T) {
	st := sensors.Station{Height: 6, Roughness: []sensors.RoughnessSector{
		{From: 30, To: 90, Length: 0.25}, {From: 90, To: 330, Length: 0.03}, {From: 330, To: 30, Length: 0.0002},
	}}
	c := New(st)
	for _, test := range []struct {
		from float64
		z0   float64
	}{{30, 0.25}, {89.9, 0.25}, {90, 0.03}, {329.9, 0.03}, {330, 0.0002}, {0, 0.0002}, {359.9, 0.0002}, {29.9, 0.0002}} {
		near(t, "factor", c.Factor(test.from), LogLaw(6, 10, test.z0), 1e-15)
	}
	st.Exposure = true
	near(t, "with exposure", New(st).Factor(60), OpenExposure(6, 0.25), 1e-15)
}

// What was measured stays beside what was corrected, and without a roughness
// not a bit changes.
func TestRawStays(t *testing.T) {
	r := sensors.Reading{Speed: 7.3, Gust: 11.1, HasGust: true, From: 200}
	if got := New(sensors.Station{Height: 6}).Of(r); got != (Corrected{Raw: 7.3, Speed: 7.3, Gust: 11.1, Factor: 1}) {
		t.Errorf("without roughness: %+v", got)
	}
	all := []sensors.RoughnessSector{{From: 0, To: 0, Length: 0.03}}
	if got := New(sensors.Station{Height: 10, Roughness: all}).Of(r); got.Factor != 1 || got.Speed != 7.3 {
		t.Errorf("at 10 m: %+v", got)
	}
	got := New(sensors.Station{Height: 6, Roughness: all}).Of(r)
	near(t, "speed", got.Speed, 7.3*1.09641, 5e-5)
	if got.Raw != 7.3 {
		t.Errorf("what was measured became %g", got.Raw)
	}
}
