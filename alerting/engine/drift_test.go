package engine_test

import (
	"math"
	"strconv"
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/sensors"
)

// Half a day of readings, second by second, at 5 m/s with eddies: the mast that
// is turned by 15 degrees (clockwise, so that it tells 15 degrees too little) and the one that reads 10 % low are named with
// intervals near the truth, and the six others are not. Drawing the readings
// instead of their means is what package drift does not do in its own test.
func TestDriftOverHalfADay(t *testing.T) {
	if racing {
		t.Skip("one goroutine, and the check runs it without the race detector")
	}
	if testing.Short() || racing {
		t.Skip("400,000 readings")
	}
	a, _ := keptScene(t, "quiet")
	s := a.scene(t, "half-day", `
airfield   skerrymoor
start      2026-07-01T00:00:00Z
length     13 h
seed       12
wind       240 deg 5 m/s
turbulence B
eddies     0.5 m/s length 1000 m time 300 s
mast touch25 turned 15 deg from 0 s
mast far07 reads 90 % from 0 s
`)
	e := a.engine(t)
	sampler, err := s.NewSampler(a.specs)
	if err != nil {
		t.Fatal(err)
	}
	var readings []sensors.Reading
	if err := e.SkipTo(s.Start); err != nil {
		t.Fatal(err)
	}
	tables := 0
	for at := s.Start + sensors.Second; ; at += sensors.Second {
		var more bool
		if readings, more = sampler.Next(readings[:0]); !more {
			break
		}
		for _, r := range readings {
			e.Stored(r)
		}
		if at%(3600*sensors.Second) == 0 {
			tables += len(e.Step(at).Tables)
		} else {
			e.Warm(at)
		}
	}
	if tables < 13 {
		t.Errorf("%d tables in 13 hours", tables)
	}
	for i, st := range a.cfg.Stations {
		f := e.Neighbours(i)
		t.Logf("%-10s %d hours, turned by %+.1f (%+.1f to %+.1f), speed times %.3f (%.3f to %.3f)", st.ID, f.Hours,
			f.Turned, f.TurnedLow, f.TurnedHigh, f.Ratio, f.RatioLow, f.RatioHigh)
		turned, low := st.ID == "touch25", st.ID == "far07"
		if !f.Known || f.Misaligned != turned || f.Low != low || f.High || f.Blocked {
			t.Errorf("%s: %+v", st.ID, f)
		}
		if turned && math.Abs(f.Turned+15) > 2.5 || low && math.Abs(f.Ratio-0.9) > 0.03 {
			t.Errorf("%s: the estimate is off: %+v", st.ID, f)
		}
	}
}

// Memory for what is learnt is bounded, however long an engine runs: a second
// day leaves no more hours than the first.
func TestLearnerForgets(t *testing.T) {
	a, _ := keptScene(t, "quiet")
	e := a.engine(t)
	start := sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC))
	if err := e.SkipTo(start); err != nil {
		t.Fatal(err)
	}
	for h := range 60 {
		table := `{"table":"neighbours","data":{"hour_ms":` + strconv.FormatInt(int64(start.Add(time.Duration(h)*time.Hour)), 10) +
			`,"masts":{"touch07":{"blocks":6,"turned_deg":` + []string{"1", "-1"}[h%2] + `,"log_ratio":0}}}}`
		if err := e.LoadTable(engine.Table{At: start.Add(time.Duration(h) * time.Hour), Payload: []byte(table)}); err != nil {
			t.Fatal(err)
		}
	}
	if f := e.Neighbours(0); f.Hours != 24 || !f.Known || f.Named() {
		t.Errorf("%+v", f)
	}
}
