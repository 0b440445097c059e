package judged_test

import (
	"fmt"
	"os"
	"path/filepath"
	"testing"

	"sockline/alerting/airfield"
	"sockline/alerting/engine"
	"sockline/alerting/hazard"
	"sockline/alerting/judged"
	"sockline/alerting/lifecycle"
	"sockline/alerting/windfield"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/synthetic"
	"sockline/testdata/scenes"
)

// field is an airfield over which scenes play.
type field struct {
	cfg *config.Config
	// kept scenes that have been generated: that takes as long as to judge them
	scenes   map[string]*synthetic.Scene
	messages map[string][]sensors.Message
}

func loadField(tb testing.TB) *field {
	tb.Helper()
	file := filepath.Join("..", "..", "testdata", "airfields", "skerrymoor.toml")
	source, err := os.ReadFile(file)
	if err != nil {
		tb.Fatal(err)
	}
	cfg, problems := config.Parse(file, source)
	if len(problems) > 0 {
		tb.Fatal(problems)
	}
	return &field{cfg: cfg, scenes: map[string]*synthetic.Scene{}, messages: map[string][]sensors.Message{}}
}

// Along is for scenes: metres before a threshold, to the right of the flight.
func (f *field) Along(runway string, before, offset float64) (x, y float64, err error) {
	p, ok := f.cfg.Airfield.Path(runway, airfield.Landing)
	if !ok {
		return 0, 0, fmt.Errorf("there is no runway end %s", runway)
	}
	x, y = p.Beside(before, offset)
	return x, y, nil
}

// Station is where a mast stands, for scenes.
func (f *field) Station(id string) (x, y float64, ok bool) {
	for _, m := range f.cfg.Airfield.Masts {
		if m.ID == id {
			return m.X, m.Y, true
		}
	}
	return 0, 0, false
}

// scene is a kept scene with its messages.
func (f *field) scene(tb testing.TB, name string) (*synthetic.Scene, []sensors.Message) {
	tb.Helper()
	if s := f.scenes[name]; s != nil {
		return s, f.messages[name]
	}
	source, err := scenes.Source(name)
	if err != nil {
		tb.Fatal(err)
	}
	s, err := synthetic.Parse(name, []byte(source), f)
	if err != nil {
		tb.Fatal(err)
	}
	var specs []synthetic.StationSpec
	for i, st := range f.cfg.Stations {
		variation, err := f.cfg.Airfield.Variation(s.Start.Time())
		if err != nil {
			tb.Fatal(err)
		}
		m := f.cfg.Airfield.Masts[i]
		specs = append(specs, synthetic.StationSpec{Station: st, X: m.X, Y: m.Y, Variation: variation})
	}
	var all []sensors.Message
	if err := s.Generate(specs, func(m sensors.Message) error { all = append(all, m); return nil }); err != nil {
		tb.Fatal(err)
	}
	f.scenes[name], f.messages[name] = s, all
	return s, all
}

// levels are those of the configuration.
func (f *field) levels() hazard.Levels {
	a := f.cfg.Alerts
	return hazard.Levels{Noticeable: a.Noticeable, Large: a.Large, Margin: a.Margin, MarginFBar: a.MarginFBar,
		FastestApproach: a.FastestApproachSpeed, Confidence: a.Confidence, Hysteresis: a.Hysteresis}
}

// engine judges by these levels.
func (f *field) engine(tb testing.TB, l hazard.Levels) *engine.Engine {
	tb.Helper()
	e, err := engine.New(engine.Settings{
		Airfield: f.cfg.Airfield, Stations: f.cfg.Stations, Levels: l, Window: f.cfg.Analysis.Window,
		Lateness: f.cfg.Analysis.Lateness, Reach: f.cfg.Analysis.Reach, Hold: f.cfg.Alerts.Hold,
		Exercise: true, Prior: windfield.DefaultPrior(),
	})
	if err != nil {
		tb.Fatal(err)
	}
	return e
}

// context is what a writer is told of the engine.
func (f *field) context(e *engine.Engine) judged.Context {
	c := judged.Context{Config: f.cfg.Hash, Software: "test", Paths: lifecycle.NamesOf(f.cfg.Airfield.Paths), Thresholds: judged.Thresholds(f.levels())}
	for _, s := range f.cfg.Stations {
		c.Stations = append(c.Stations, s.ID)
	}
	for i := range f.cfg.Airfield.Paths {
		_, owner := e.Stretch(i)
		c.Owners = append(c.Owners, owner)
	}
	return c
}

// looks is what the last step of the engine found.
func (f *field) looks(e *engine.Engine, res *engine.Result, dst []judged.Look) []judged.Look {
	dst = dst[:0]
	for i := range res.Assessments {
		s, _ := e.Stretch(i)
		dst = append(dst, judged.Look{Stretch: s, Without: e.Without(i), Found: &res.Assessments[i]})
	}
	return dst
}

// play runs messages through an engine.
func play(e *engine.Engine, messages []sensors.Message, start, end sensors.Instant, see func(*engine.Result)) {
	until := func(now sensors.Instant) {
		for next, due := e.Due(now); due && next <= end; next, due = e.Due(now) {
			see(e.Step(next))
		}
	}
	until(start)
	for _, m := range messages {
		until(m.Received)
		_, _, _ = e.Receive(m) // scenes hold faults on purpose
	}
	until(end.Add(e.Lateness()) + 1)
}
