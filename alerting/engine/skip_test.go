package engine_test

import (
	"strings"
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/alerting/hazard"
	"sockline/alerting/windfield"
	"sockline/config"
	"sockline/sensors"
)

// A stretch of steps can be left out only when no reading waits for one of
// them, and never backwards.
func TestSkipTo(t *testing.T) {
	start := sensors.At(time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC))
	cfg, err := config.Load("../../testdata/airfields/pellmark.toml")
	if err != nil {
		t.Fatal(err)
	}
	e, err := engine.New(engine.Settings{
		Airfield: cfg.Airfield, Stations: cfg.Stations, Window: cfg.Analysis.Window, Lateness: cfg.Analysis.Lateness,
		Reach: cfg.Analysis.Reach, Hold: cfg.Alerts.Hold, Exercise: true, Prior: windfield.DefaultPrior(),
		Levels: hazard.Levels{Noticeable: 5, Large: 8, Margin: 9, MarginFBar: 0.1, FastestApproach: 60, Confidence: 0.8},
	})
	if err != nil {
		t.Fatal(err)
	}
	if _, waiting := e.Waiting(); waiting {
		t.Error("a new engine has readings that wait")
	}
	if err := e.SkipTo(start + 400); err != nil { // cut to the second
		t.Fatal(err)
	}
	if got := e.LastStep(); got != start {
		t.Errorf("it goes on after %s, want %s", got, start)
	}
	e.Stored(sensors.Reading{Time: start + 2500, Arrival: start + 2600, Speed: 5, From: 240, Exercise: true})
	if last, waiting := e.Waiting(); !waiting || last != start+3000 {
		t.Errorf("waiting for %s (%v), want the third second", last, waiting)
	}
	for _, row := range []struct {
		to   sensors.Instant
		want string // in the error; empty for none
	}{
		{start + 2000, ""},
		{start + 1000, "has been closed already"},
		{start + 3000, "waits for its step"},
	} {
		err := e.SkipTo(row.to)
		if (err == nil) != (row.want == "") || (err != nil && !strings.Contains(err.Error(), row.want)) {
			t.Errorf("skip to %s: %v, want %q", row.to, err, row.want)
		}
	}
	if r := e.Step(start + 3000); len(r.Readings) != 1 {
		t.Errorf("the step after the skip has %d readings, want one", len(r.Readings))
	}
	if _, waiting := e.Waiting(); waiting {
		t.Error("a reading waits still")
	}
}
