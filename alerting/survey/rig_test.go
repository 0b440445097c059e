package survey

import (
	"os"
	"path/filepath"
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/alerting/hazard"
	"sockline/alerting/shear"
	"sockline/alerting/windfield"
	"sockline/config"
	"sockline/sensors/synthetic"
)

// network is one of the test airfields with its masts.
func network(tb testing.TB, name string) *Network {
	tb.Helper()
	file := filepath.Join("..", "..", "testdata", "airfields", name+".toml")
	source, err := os.ReadFile(file)
	if err != nil {
		tb.Fatal(err)
	}
	cfg, problems := config.Parse(file, source)
	if len(problems) > 0 {
		tb.Fatal(problems)
	}
	a := cfg.Alerts
	n := &Network{Name: cfg.Airfield.Name, Settings: engine.Settings{
		Airfield: cfg.Airfield, Stations: cfg.Stations, Window: cfg.Analysis.Window, Lateness: cfg.Analysis.Lateness,
		Reach: cfg.Analysis.Reach, Hold: a.Hold, Prior: windfield.DefaultPrior(),
		Levels: hazard.Levels{
			Noticeable: a.Noticeable, Large: a.Large, Margin: a.Margin, MarginFBar: a.MarginFBar,
			FastestApproach: a.FastestApproachSpeed, Confidence: a.Confidence, Hysteresis: a.Hysteresis,
		},
	}}
	variation, err := cfg.Airfield.Variation(time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC))
	if err != nil {
		tb.Fatal(err)
	}
	for i, m := range cfg.Airfield.Masts {
		n.Specs = append(n.Specs, synthetic.StationSpec{Station: cfg.Stations[i], X: m.X, Y: m.Y, Variation: variation})
	}
	return n
}

// sideOf is a distribution of M with one value.
func sideOf(m float64) *shear.Side {
	s := &shear.Side{Sorted: make([]float64, windfield.Draws)}
	for i := range s.Sorted {
		s.Sorted[i] = m
	}
	return s
}
