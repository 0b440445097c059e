package airfield

import (
	"math"
	"strings"
	"testing"
	"time"

	"sockline/testdata/outside"
)

// yearTime is the moment of a decimal year.
func yearTime(year float64) time.Time {
	whole := math.Floor(year)
	start := time.Date(int(whole), 1, 1, 0, 0, 0, 0, time.UTC)
	next := time.Date(int(whole)+1, 1, 1, 0, 0, 0, 0, time.UTC)
	return start.Add(time.Duration((year - whole) * float64(next.Sub(start))))
}

// The test values that come with the model; gl_decl_deg was evaluated by
// GeographicLib from the same coefficients, decl_deg is printed to 0.01.
func TestDeclinationAgainstTestValues(t *testing.T) {
	rows := outside.Rows(t, "wmm2025_test_values.csv")
	if len(rows) != 100 {
		t.Fatalf("%d rows, want 100", len(rows))
	}
	worst := 0.0
	for i, r := range rows {
		got, err := Declination(num(t, r, "lat_deg"), num(t, r, "lon_deg"), 1000*num(t, r, "alt_km"), yearTime(num(t, r, "date")))
		if err != nil {
			t.Fatalf("row %d: %v", i, err)
		}
		d := turn(got, num(t, r, "gl_decl_deg"))
		if worst = max(worst, d); d > 1e-4 {
			t.Errorf("row %d: %.6f, GeographicLib %s", i, got, r["gl_decl_deg"])
		}
		if d := turn(got, num(t, r, "decl_deg")); d > 0.006 {
			t.Errorf("row %d: %.6f, published %s", i, got, r["decl_deg"])
		}
	}
	t.Logf("largest difference %.1e deg", worst)
}

func TestDeclinationAtAirfields(t *testing.T) {
	for _, r := range outside.Rows(t, "wmm2025_airfields.csv") {
		got, err := Declination(num(t, r, "lat_deg"), num(t, r, "lon_deg"), num(t, r, "h_m"), yearTime(num(t, r, "year")))
		if err != nil {
			t.Fatalf("%s: %v", r["airfield"], err)
		}
		if d := turn(got, num(t, r, "decl_deg")); d > 1e-4 {
			t.Errorf("%s %s: %.6f, want %s", r["airfield"], r["year"], got, r["decl_deg"])
		}
	}
}

// The twelve points of WMM2025_TEST_VALUES.txt (NOAA NCEI/BGS), as quoted in
// public test files: year, height km, latitude, longitude, declination.
func TestDeclinationOfficialPoints(t *testing.T) {
	for _, c := range [][5]float64{
		{2025.0, 0, 80, 0, 1.28}, {2025.0, 0, 0, 120, -0.16}, {2025.0, 0, -80, 240, 68.78},
		{2025.0, 100, 80, 0, 0.85}, {2025.0, 100, 0, 120, -0.15}, {2025.0, 100, -80, 240, 68.21},
		{2027.5, 0, 80, 0, 2.59}, {2027.5, 0, 0, 120, -0.24}, {2027.5, 0, -80, 240, 68.49},
		{2027.5, 100, 80, 0, 2.16}, {2027.5, 100, 0, 120, -0.23}, {2027.5, 100, -80, 240, 67.93},
	} {
		got, err := Declination(c[2], c[3], 1000*c[1], yearTime(c[0]))
		if err != nil || math.Abs(got-c[4]) > 0.0051 {
			t.Errorf("%v: %.4f, %v", c, got, err)
		}
	}
}

func TestDeclinationOutsideTheModel(t *testing.T) {
	for name, c := range map[string]struct {
		lat, lon float64
		at       time.Time
	}{
		"before":    {54, -20, time.Date(2024, 12, 31, 23, 59, 59, 0, time.UTC)},
		"after":     {54, -20, time.Date(2030, 1, 1, 0, 0, 1, 0, time.UTC)},
		"pole":      {90, 0, time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC)},
		"not a lat": {math.NaN(), 0, time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC)},
	} {
		if got, err := Declination(c.lat, c.lon, 0, c.at); err == nil {
			t.Errorf("%s: %v and no error", name, got)
		}
	}
	_, err := RoundedVariation(54, -20, 42, time.Date(2031, 1, 1, 0, 0, 0, 0, time.UTC))
	if err == nil || !strings.Contains(err.Error(), "magnetic_variation") {
		t.Errorf("the error does not say what to do: %v", err)
	}
}

// One value a UTC date, whatever the hour and the zone it is written in.
func TestRoundedVariationHoldsThroughADay(t *testing.T) {
	zone := time.FixedZone("ahead", 11*3600)
	first, err := RoundedVariation(54, -20, 42, time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC))
	if err != nil {
		t.Fatal(err)
	}
	for _, at := range []time.Time{
		time.Date(2026, 7, 1, 23, 59, 59, 999, time.UTC), time.Date(2026, 7, 2, 10, 59, 0, 0, zone),
	} {
		if got, err := RoundedVariation(54, -20, 42, at); err != nil || got != first {
			t.Errorf("%v: %v, %v, want %v", at, got, err, first)
		}
	}
	exact, _ := Declination(54, -20, 42, time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC))
	if math.Abs(exact-first) > 0.05 || math.Abs(math.Round(first*10)-first*10) > 1e-9 {
		t.Errorf("%v is not %v rounded to 0.1", first, exact)
	}
}

func TestReadGaussRefusesDamage(t *testing.T) {
	for name, table := range map[string]string{
		"empty":       "",
		"a row short": strings.Join(strings.Split(strings.TrimSpace(wmmSource), "\n")[:60], "\n"),
		"bad number":  strings.Replace(wmmSource, "-29351.8", "x", 1),
		"bad degree":  strings.Replace(wmmSource, "12,12,", "13,12,", 1),
		"few fields":  strings.Replace(wmmSource, "1,0,-29351.8,0,12,0", "1,0,-29351.8", 1),
	} {
		if _, err := readGauss(table); err == nil {
			t.Errorf("%s: accepted", name)
		}
	}
}
