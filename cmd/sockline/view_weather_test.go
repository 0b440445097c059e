package main

import (
	"encoding/json"
	"math"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/engine"
	"sockline/alerting/page"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// viewAfter gives every mast the wind that a function has for it, once a second,
// and puts the last step into the page's view.
func viewAfter(t *testing.T, cfg *config.Config, seconds int, wind func(mast, second int) (from, speed float64)) *page.View {
	t.Helper()
	e, err := engine.New(engineSettings(cfg, true))
	if err != nil {
		t.Fatal(err)
	}
	r := newReporter(cfg, true)
	start := sensors.At(time.Date(2026, 7, 1, 1, 0, 0, 0, time.UTC))
	var v *page.View
	for second := 1; second <= seconds; second++ {
		at := start + sensors.Instant(second)*sensors.Second
		for i := range cfg.Stations {
			from, speed := wind(i, second)
			// A little unrest, so that no mast passes for stuck.
			e.Offer(sensors.Reading{Station: i, Time: at, Arrival: at, Exercise: true,
				From: quantity.NormalizeDegrees(from + float64((second*(i+3))%7) - 3), Speed: speed + 0.1*float64((second+i)%3)})
		}
		res := e.Step(at)
		if second == seconds {
			rep := r.of(e, res)
			v = viewOf(rep, &wording.Status{Airfield: cfg.Airfield.ID, Condition: rep.Condition}, time.Time{})
		}
	}
	return v
}

// What the page draws of fronts and columns of air is in its view, each with its
// sentence, its mark and the notice.
func TestViewHoldsFrontsAndColumns(t *testing.T) {
	cfg := mustLoad(t, skerrymoor)
	bearing := cfg.Airfield.Paths[0].BearingTrue()
	sin, cos := math.Sincos(bearing * math.Pi / 180)
	v := viewAfter(t, cfg, 560, func(i, second int) (float64, float64) {
		m := cfg.Airfield.Masts[i]
		// A line of 10 m/s along the runway, over its middle after 600 s.
		if 600+(m.X*sin+m.Y*cos)/10 < float64(second) {
			return bearing + 180, 13
		}
		return bearing, 3
	})
	if len(v.Fronts) != 1 || len(v.Vertical) != 0 {
		t.Fatalf("%d fronts, %d pairs of levels", len(v.Fronts), len(v.Vertical))
	}
	var f struct {
		Kind     string       `json:"kind"`
		Line     [][2]float64 `json:"line"`
		Speed    float64      `json:"speed_kt"`
		Arrivals []struct {
			Place   string `json:"place"`
			Arrived bool   `json:"arrived"`
		} `json:"arrivals"`
		Text, Notice string
	}
	if err := json.Unmarshal(v.Fronts[0], &f); err != nil {
		t.Fatal(err)
	}
	if f.Kind != "gust-front" || len(f.Line) != 2 || math.Abs(f.Speed-19.4) > 4 || len(f.Arrivals) != 2+len(cfg.Stations) ||
		f.Notice != alerting.Notice || !strings.HasPrefix(f.Text, "EXERCISE: A gust front moves toward ") {
		t.Errorf("%s", v.Fronts[0])
	}
	if f.Arrivals[1].Place != "threshold 25" || f.Arrivals[1].Arrived || !strings.Contains(f.Text, "the threshold of runway 25 about 01:1") {
		t.Errorf("the far threshold: %s", v.Fronts[0])
	}

	cfg = mustLoad(t, "../../testdata/airfields/brandersea.toml")
	v = viewAfter(t, cfg, 150, func(i, _ int) (float64, float64) {
		if cfg.Stations[i].Height > 30 {
			return 250, 12
		}
		return 240, 1
	})
	if len(v.Fronts) != 0 || len(v.Vertical) != 1 {
		t.Fatalf("%d fronts, %d pairs of levels", len(v.Fronts), len(v.Vertical))
	}
	if text := string(v.Vertical[0]); !strings.Contains(text, `"class":"severe"`) || !strings.Contains(text, `"sign":"night-inversion"`) ||
		!strings.Contains(text, alerting.Notice) {
		t.Error(text)
	}
}
