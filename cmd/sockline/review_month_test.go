package main

import (
	"math"
	"os"
	"path/filepath"
	"testing"
	"time"

	"sockline/alerting/history"
	"sockline/config"
	"sockline/sensors"
)

// TestReportOnAMonth holds that the report of an event out of a month of eight
// masts, and the summary of that month, come within seconds.
func TestReportOnAMonth(t *testing.T) {
	if os.Getenv("SOCKLINE_LARGE_HISTORY") == "" {
		t.Skip("with SOCKLINE_LARGE_HISTORY only: a month of readings takes minutes to write")
	}
	dir := kept(t, skerrymoor, twice)
	cfg, err := config.Load(skerrymoor)
	if err != nil {
		t.Fatal(err)
	}
	fillMonth(t, cfg, dir)
	id := listed(t, dir)[0]["id"].(string)
	out := filepath.Join(t.TempDir(), "report.html")
	began := time.Now()
	succeed(t, "events", "report", "--history", dir, id, "--out", out)
	report := time.Since(began)
	began = time.Now()
	succeed(t, "history", "summary", "--history", dir, "--month", "2026-07", "--out", out+"l")
	t.Logf("report in %v, summary of the month in %v", report, time.Since(began))
	if report > 10*time.Second {
		t.Errorf("the report took %v", report)
	}
}

// fillMonth adds the readings of July 2026 to a history, second by second, but
// for the days that it has.
func fillMonth(t *testing.T, cfg *config.Config, dir string) {
	t.Helper()
	store, err := history.Open(dir, history.Options{})
	if err != nil {
		t.Fatal(err)
	}
	w, err := store.Writer(history.WriterOptions{})
	if err != nil {
		t.Fatal(err)
	}
	var ids []string
	for _, s := range cfg.Stations {
		ids = append(ids, s.ID)
	}
	tick := time.NewTicker(time.Millisecond)
	defer tick.Stop()
	first := sensors.At(time.Date(2026, 7, 3, 0, 0, 0, 0, time.UTC))
	for n := range 29 * 86400 {
		at := first + sensors.Instant(n)*sensors.Second
		b := history.Batch{Step: at, Stations: ids}
		for i := range ids {
			wave := math.Sin(float64(n)/97 + float64(i))
			b.Readings = append(b.Readings, sensors.Reading{Station: i, Time: at - 400, Arrival: at - 300,
				Speed: math.Round((6+2*wave)*100) / 100, From: math.Round(240 + 12*wave), Exercise: true})
		}
		w.Submit(b)
		for n%1000 == 0 && store.Health().WaitingSteps > 4000 {
			<-tick.C
		}
	}
	if err := w.Close(t.Context()); err != nil {
		t.Fatal(err)
	}
	if h := store.Health(); h.StepsDropped > 0 {
		t.Fatalf("%d steps were dropped", h.StepsDropped)
	}
	if err := store.Close(); err != nil {
		t.Fatal(err)
	}
}
