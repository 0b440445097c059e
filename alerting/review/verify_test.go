package review

import (
	"math"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/contingency"
	"sockline/alerting/history"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

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
	if got, want := v.ByLevel[0].Table, (contingency.Table{Hits: 4, FalseAlarms: 2, Misses: 2, CorrectNulls: 1}); got != want {
		t.Errorf("level 1: %+v, want %+v", got, want)
	}
	// At level 2 only the reports of 18 kt are felt: one of them told.
	if got, want := v.ByLevel[1].Table, (contingency.Table{Hits: 1, FalseAlarms: 4, Misses: 1, CorrectNulls: 3}); got != want {
		t.Errorf("level 2: %+v, want %+v", got, want)
	}
	if len(v.ByMonth) != 1 || v.ByMonth[0].Period != "2026-07" || v.ByMonth[0].Table != v.ByLevel[0].Table {
		t.Errorf("by month: %+v", v.ByMonth)
	}
	if v.Amount.N != 3 || math.Abs(*v.Amount.MeanKt-(18+6+9.99-60)/3) > 1e-9 {
		t.Errorf("amounts: %+v", v.Amount)
	}
}
