package contingency

import (
	"math"
	"testing"
)

// TestFinley holds the scores to the table of J.P. Finley's tornado forecasts,
// 1884, and their values as D.S. Wilks, Statistical Methods in the Atmospheric
// Sciences, works them out in the chapter "Forecast verification".
func TestFinley(t *testing.T) {
	s := Table{Hits: 28, FalseAlarms: 72, Misses: 23, CorrectNulls: 2680}.Scores()
	for _, row := range []struct {
		name string
		got  *float64
		want float64
	}{
		{"POD", s.POD.Value, 0.5490}, {"FAR", s.FAR.Value, 0.7200}, {"POFD", s.POFD.Value, 0.02616}, {"CSI", s.CSI.Value, 0.2276},
		{"bias", s.Bias, 1.9608}, {"PC", s.PC, 0.9661}, {"HSS", s.HSS, 0.3553}, {"PSS", s.PSS, 0.5229},
		{"ETS", s.ETS, 0.2160}, {"SEDI", s.SEDI, 0.7528},
	} {
		if row.got == nil || math.Abs(*row.got-row.want) > 5e-5 {
			t.Errorf("%s: %v, want %v", row.name, row.got, row.want)
		}
	}
}

// What cannot be divided has no value, and what can has one.
func TestNothingToDivide(t *testing.T) {
	if s := (Table{}).Scores(); s != (Scores{}) {
		t.Errorf("nothing was counted: %+v", s)
	}
	s := Table{CorrectNulls: 5}.Scores()
	if s.POD.Value != nil || s.FAR.Value != nil || s.CSI.Value != nil || s.Bias != nil || s.HSS != nil || s.PSS != nil || s.ETS != nil || s.SEDI != nil {
		t.Errorf("nothing came and nothing was told: %+v", s)
	}
	if s.PC == nil || *s.PC != 1 || s.POFD.Value == nil || *s.POFD.Value != 0 || s.POFD.Of != 5 {
		t.Errorf("all of it was right: %+v", s)
	}
	s = Table{Hits: 3}.Scores()
	if *s.POD.Value != 1 || *s.CSI.Value != 1 || *s.Bias != 1 || s.POFD.Value != nil || s.PSS != nil || s.ETS != nil {
		t.Errorf("hits only: %+v", s)
	}
}

func TestCount(t *testing.T) {
	var got Table
	for i, c := range []struct{ came, told bool }{{true, true}, {true, false}, {false, true}, {false, false}} {
		for range i + 1 {
			got.Count(c.came, c.told)
		}
	}
	if want := (Table{Hits: 1, Misses: 2, FalseAlarms: 3, CorrectNulls: 4}); got != want {
		t.Errorf("%+v, want %+v", got, want)
	}
}

// TestWilson holds the interval to the examples of R.G. Newcombe, "Two-sided
// confidence intervals for the single proportion: comparison of seven methods",
// Statistics in Medicine 17, 1998, table I, method 3 (from memory).
func TestWilson(t *testing.T) {
	for _, row := range []struct {
		k, n      int
		low, high float64
	}{
		{81, 263, 0.2553, 0.3662}, {15, 148, 0.0624, 0.1605}, {0, 20, 0.0000, 0.1611}, {1, 29, 0.0061, 0.1718},
	} {
		got := Share(row.k, row.n)
		if math.Abs(*got.Low-row.low) > 5e-5 || math.Abs(*got.High-row.high) > 5e-5 || got.Of != row.n || *got.Value != float64(row.k)/float64(row.n) {
			t.Errorf("%d of %d: %.4f to %.4f, want %.4f to %.4f", row.k, row.n, *got.Low, *got.High, row.low, row.high)
		}
	}
	if low, high := Wilson(0, 0); low != 0 || high != 1 {
		t.Errorf("nothing met lies between %g and %g", low, high)
	}
	if Share(0, 0) != (Interval{}) {
		t.Error("a share of nothing has a value")
	}
}
