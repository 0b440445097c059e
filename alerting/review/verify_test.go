package review

import (
	"math"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// TestFinley holds the scores to the table of J.P. Finley's tornado forecasts,
// 1884, and their values as D.S. Wilks, Statistical Methods in the Atmospheric
// Sciences, works them out in the chapter "Forecast verification".
func TestFinley(t *testing.T) {
	s := Contingency{Hits: 28, FalseAlarms: 72, Misses: 23, CorrectNulls: 2680}.Scores()
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
	none := Contingency{}.Scores()
	if none.POD.Value != nil || none.Bias != nil || none.HSS != nil || none.SEDI != nil {
		t.Errorf("nothing was reported: %+v", none)
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
		got := Wilson(row.k, row.n)
		if math.Abs(*got.Low-row.low) > 5e-5 || math.Abs(*got.High-row.high) > 5e-5 {
			t.Errorf("%d of %d: %.4f to %.4f, want %.4f to %.4f", row.k, row.n, *got.Low, *got.High, row.low, row.high)
		}
	}
}

func TestVerify(t *testing.T) {
	opened := time.Date(2026, 7, 1, 14, 0, 0, 0, time.UTC)
	closed := opened.Add(4 * time.Minute)
	life := func(id, runway, kind string, level alerting.Level) Life {
		return Life{ID: id, Runway: runway, Operation: "landing", Kind: kind, Opened: opened, Closed: &closed, highest: level,
			Level: level.String(), PeakKt: -20, FromM: 2500, ToM: 1000}
	}
	alerts := []Life{life("loss", "07", "headwind-loss", alerting.Large), life("gain", "25", "headwind-gain", alerting.Noticeable),
		life("alone", "07", "headwind-gain", alerting.Noticeable), life("other", "07", "crosswind", alerting.Noticeable)}
	metres := func(v float64) *float64 { return &v }
	at := func(d time.Duration) sensors.Instant { return sensors.At(opened.Add(d)) }
	reports := []history.PilotReport{
		{ID: "hit", At: at(5 * time.Minute), Runway: "07", Operation: "landing", Felt: FeltLoss, Amount: 18 * quantity.Knot},
		{ID: "too late", At: at(8 * time.Minute), Runway: "07", Operation: "landing", Felt: FeltLoss, Amount: 18 * quantity.Knot},
		{ID: "elsewhere", At: at(2 * time.Minute), Runway: "07", Operation: "landing", Felt: FeltLoss, FromM: metres(4800), ToM: metres(4000)},
		{ID: "near", At: at(2 * time.Minute), Runway: "07", Operation: "landing", Felt: FeltLoss, FromM: metres(3300)},
		{ID: "none felt", At: at(time.Minute), Runway: "25", Operation: "landing", Felt: FeltNone},
		{ID: "quiet day", At: at(time.Hour), Runway: "25", Operation: "landing", Felt: FeltNone},
		{ID: "unseen", At: at(2 * time.Hour), Runway: "07", Operation: "landing", Felt: FeltLoss, Amount: 12 * quantity.Knot},
		{ID: "said so", At: at(3 * time.Hour), Runway: "07", Operation: "landing", Felt: FeltLoss, Event: "loss"},
		{ID: "small", At: at(3 * time.Minute), Runway: "07", Operation: "landing", Felt: FeltLoss, Amount: 6 * quantity.Knot},
		{ID: "ten is ten", At: at(3 * time.Minute), Runway: "07", Operation: "landing", Felt: FeltLoss, Amount: 9.99 * quantity.Knot},
	}
	v := Verify(reports, alerts, VerifyOptions{
		Changes:  [4]float64{0, 10 * quantity.Knot, 15 * quantity.Knot, 17 * quantity.Knot},
		Observed: func(_, _ string, at sensors.Instant) bool { return at < sensors.At(opened.Add(90*time.Minute)) },
	})
	want := map[string]string{"hit": "hit", "too late": "miss", "elsewhere": "miss", "near": "hit", "none felt": "false-alarm",
		"quiet day": "correct-null", "unseen": "not-observed", "said so": "hit", "small": "false-alarm", "ten is ten": "hit"}
	for _, m := range v.Matches {
		if m.Outcome != want[m.Report] {
			t.Errorf("%s: %s, want %s", m.Report, m.Outcome, want[m.Report])
		}
	}
	if v.Unverified != 2 || v.NotObserved != 1 || v.Reports != len(reports) {
		t.Errorf("%+v", v)
	}
	if got, want := v.ByLevel[0].Table, (Contingency{Hits: 4, FalseAlarms: 2, Misses: 2, CorrectNulls: 1}); got != want {
		t.Errorf("level 1: %+v, want %+v", got, want)
	}
	// At level 2 only the reports of 18 kt are felt: one of them told.
	if got, want := v.ByLevel[1].Table, (Contingency{Hits: 1, FalseAlarms: 4, Misses: 1, CorrectNulls: 3}); got != want {
		t.Errorf("level 2: %+v, want %+v", got, want)
	}
	if len(v.ByMonth) != 1 || v.ByMonth[0].Period != "2026-07" || v.ByMonth[0].Table != v.ByLevel[0].Table {
		t.Errorf("by month: %+v", v.ByMonth)
	}
	if v.Amount.N != 3 || math.Abs(*v.Amount.MeanKt-(18+6+9.99-60)/3) > 1e-9 {
		t.Errorf("amounts: %+v", v.Amount)
	}
}
