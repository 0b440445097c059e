package engine_test

import (
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/engine"
	"sockline/alerting/hazard"
	"sockline/alerting/lifecycle"
	"sockline/alerting/windfield"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/synthetic"
	"sockline/testdata/scenes"
)

// aerodrome is a configured airfield with what a scene must know of it. It
// only reads, so one may serve many runs at once.
type aerodrome struct {
	cfg   *config.Config
	specs []synthetic.StationSpec
}

// loadAerodrome reads one of the test airfields, with some of its text
// replaced (old, new, ...).
func loadAerodrome(t testing.TB, name string, on sensors.Instant, replaced ...string) *aerodrome {
	t.Helper()
	file := filepath.Join("..", "..", "testdata", "airfields", name+".toml")
	source, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	text := string(source)
	for i := 0; i < len(replaced); i += 2 {
		if strings.Count(text, replaced[i]) != 1 {
			t.Fatalf("%s does not hold %q once", file, replaced[i])
		}
		text = strings.Replace(text, replaced[i], replaced[i+1], 1)
	}
	cfg, problems := config.Parse(file, []byte(text))
	if len(problems) > 0 {
		t.Fatal(problems)
	}
	a := &aerodrome{cfg: cfg}
	for i, st := range cfg.Stations {
		variation, err := cfg.Airfield.Variation(on.Time())
		if err != nil {
			t.Fatal(err)
		}
		m := cfg.Airfield.Masts[i]
		a.specs = append(a.specs, synthetic.StationSpec{Station: st, X: m.X, Y: m.Y, Variation: variation})
	}
	return a
}

// Along is for scenes: metres before a threshold, to the right of the flight.
func (a *aerodrome) Along(runway string, before, offset float64) (x, y float64, err error) {
	p, ok := a.cfg.Airfield.Path(runway, airfield.Landing)
	if !ok {
		return 0, 0, fmt.Errorf("there is no runway end %s", runway)
	}
	x, y = p.Beside(before, offset)
	return x, y, nil
}

// Station is where a mast stands, for scenes.
func (a *aerodrome) Station(id string) (x, y float64, ok bool) {
	for _, m := range a.cfg.Airfield.Masts {
		if m.ID == id {
			return m.X, m.Y, true
		}
	}
	return 0, 0, false
}

// scene reads the text of a scene over the airfield.
func (a *aerodrome) scene(t testing.TB, name, source string) *synthetic.Scene {
	t.Helper()
	s, err := synthetic.Parse(name+".scene", []byte(source), a)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// keptScene is a scene of testdata over its airfield.
func keptScene(t testing.TB, name string) (*aerodrome, *synthetic.Scene) {
	t.Helper()
	source, err := scenes.Source(name)
	if err != nil {
		t.Fatal(err)
	}
	id := "skerrymoor" // which is on true north
	for line := range strings.Lines(string(source)) {
		if words := strings.Fields(line); len(words) >= 2 && words[0] == "airfield" {
			id = words[1]
		}
	}
	a := loadAerodrome(t, id, sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC)))
	s := a.scene(t, name, string(source))
	if s.Airfield != a.cfg.Airfield.ID {
		t.Fatalf("%s.scene plays over %s, not over %s", name, s.Airfield, a.cfg.Airfield.ID)
	}
	return a, s
}

// messages are what the masts of the scene send, in order of arrival.
func (a *aerodrome) messages(t testing.TB, s *synthetic.Scene) []sensors.Message {
	t.Helper()
	var all []sensors.Message
	err := s.Generate(a.specs, func(m sensors.Message) error {
		all = append(all, m)
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return all
}

// settings are those of the configuration.
func (a *aerodrome) settings() engine.Settings {
	al := a.cfg.Alerts
	return engine.Settings{
		Airfield: a.cfg.Airfield, Stations: a.cfg.Stations,
		Levels: hazard.Levels{
			Noticeable: al.Noticeable, Large: al.Large, Margin: al.Margin, MarginFBar: al.MarginFBar,
			FastestApproach: al.FastestApproachSpeed, Confidence: al.Confidence, Hysteresis: al.Hysteresis,
			Limits: hazard.Limits{
				WindShift: al.WindShift, Vertical: al.VerticalShear, Crosswind: al.CrosswindLimit, Tailwind: al.TailwindLimit,
			},
		},
		Window: a.cfg.Analysis.Window, Lateness: a.cfg.Analysis.Lateness, Reach: a.cfg.Analysis.Reach,
		Hold: al.Hold, Exercise: true, Prior: windfield.DefaultPrior(),
	}
}

// engine makes an engine with the settings of the configuration.
func (a *aerodrome) engine(t testing.TB) *engine.Engine {
	t.Helper()
	e, err := engine.New(a.settings())
	if err != nil {
		t.Fatal(err)
	}
	return e
}

// words is what the notices of a run need besides its alerts.
func (a *aerodrome) words() wording.Context {
	return wording.Context{
		Airfield: a.cfg.Airfield.ID, Exercise: true,
		Margin: a.cfg.Alerts.Margin, MarginIsStall: a.cfg.Alerts.MarginDerived,
	}
}

// play gives the messages to the engine and closes every step when it is due,
// the last one at end. Each result goes to see before the next step
// overwrites it.
func play(e *engine.Engine, messages []sensors.Message, start, end sensors.Instant, see func(*engine.Result)) {
	until := func(now sensors.Instant) {
		for {
			next, due := e.Due(now)
			if !due || next > end {
				return
			}
			see(e.Step(next))
		}
	}
	until(start)
	for _, m := range messages {
		until(m.Received)
		// What is wrong with a message is counted; scenes hold faults on purpose.
		_, _, _ = e.Receive(m)
	}
	until(end.Add(e.Lateness()) + 1)
}

// frame is one path at one step as someone outside would see it.
type frame struct {
	state      alerting.PathState
	complete   bool
	unobserved []airfield.Interval
	missing    []string
	loss, gain hazard.Change
	alerts     []lifecycle.Alert // open, as last issued
}

// moment is one step.
type moment struct {
	at     sensors.Instant
	paths  []frame
	issues []lifecycle.Transition
	live   int // masts
}

// recorder keeps what a run showed, and checks each step against the rules
// that hold whatever the weather.
type recorder struct {
	t       testing.TB
	a       *aerodrome
	e       *engine.Engine
	open    map[string]lifecycle.Alert // by path and kind
	closed  map[string]bool            // ids
	last    sensors.Instant
	moments []moment
}

func newRecorder(t testing.TB, a *aerodrome, e *engine.Engine) *recorder {
	return &recorder{t: t, a: a, e: e, open: map[string]lifecycle.Alert{}, closed: map[string]bool{}}
}

// see takes the result of a step.
func (r *recorder) see(res *engine.Result) {
	if r.last != 0 && res.At != r.last+sensors.Second {
		r.t.Errorf("the step %v follows %v", res.At, r.last)
	}
	r.last = res.At
	m := moment{at: res.At, issues: append([]lifecycle.Transition(nil), res.Transitions...)}
	for i := range res.Snapshot.Len() {
		if res.Snapshot.Mast(i).State == averages.Live {
			m.live++
		}
	}
	for _, tr := range res.Transitions {
		r.issue(res.At, tr)
	}
	for i := range res.Assessments {
		m.paths = append(m.paths, r.frame(i, &res.Assessments[i]))
	}
	r.checkOpen(res)
	r.moments = append(r.moments, m)
}

func (r *recorder) frame(i int, as *hazard.Assessment) frame {
	p := r.a.cfg.Airfield.Paths[i]
	f := frame{complete: as.Complete, loss: as.Loss, gain: as.Gain, unobserved: airfield.Unobserved(p, as.Observed)}
	for _, s := range as.Missing {
		f.missing = append(f.missing, r.a.cfg.Stations[s].ID)
	}
	for _, kind := range alerting.Kinds() {
		if alert, ok := r.open[p.Name()+" "+string(kind)]; ok {
			f.alerts = append(f.alerts, alert)
		}
	}
	f.state = wording.StateOf(len(f.alerts) > 0, as)
	r.checkFrame(p, as, &f)
	return f
}

// checkFrame: nothing is called below its limits that is not all observed, and
// nothing that is not observed has numbers.
func (r *recorder) checkFrame(p airfield.Path, as *hazard.Assessment, f *frame) {
	complete, _ := airfield.Complete(as.Observed, p.Needed())
	if f.state == alerting.BelowLimits && !complete {
		r.t.Errorf("%v: %s is below its limits although its needed ground is not all observed", r.last, p.Name())
	}
	if as.Complete && !complete {
		r.t.Errorf("%v: %s is called complete with the observed ground %v", r.last, p.Name(), as.Observed)
	}
	if !as.Complete && as.Reason == "" {
		r.t.Errorf("%v: %s is not all observed and no reason is given", r.last, p.Name())
	}
	for _, c := range []*hazard.Change{&as.Loss, &as.Gain} {
		if len(as.Observed) == 0 {
			used := c.Used
			c := *c
			c.Used = nil
			if fmt.Sprint(c) != fmt.Sprint(hazard.Change{}) {
				r.t.Errorf("%v: nothing of %s is observed, yet there are numbers: %+v (used %v)", r.last, p.Name(), c, used)
			}
			continue
		}
		for _, v := range []float64{c.Median, c.Low, c.High, c.From, c.To, c.MaxSlope, c.MeanSlope, c.FBar} {
			if math.IsNaN(v) || math.IsInf(v, 0) {
				r.t.Errorf("%v: %s has a number that is none: %+v", r.last, p.Name(), *c)
			}
		}
		if !(0 <= c.Low && c.Low <= c.Median && c.Median <= c.High) || c.From < c.To {
			r.t.Errorf("%v: %s: low, median, high or its ground are not in order: %+v", r.last, p.Name(), *c)
		}
	}
}

// issue takes one transition: at most one alert is open for a path and kind,
// every issue continues an open alert, revisions count up, times do not run
// backwards.
func (r *recorder) issue(at sensors.Instant, tr lifecycle.Transition) {
	a := tr.Alert
	key := a.Operation + " " + a.Runway + " " + string(a.Kind)
	before, open := r.open[key]
	fail := func(format string, args ...any) {
		r.t.Errorf("%v: %s, revision %d: %s", at, a.ID, a.Revision, fmt.Sprintf(format, args...))
	}
	switch {
	case tr.At != at || a.Updated != at:
		fail("issued at %v, updated %v", tr.At, a.Updated)
	case r.closed[a.ID]:
		fail("it was closed before")
	case open && before.ID != a.ID:
		fail("%s is open on the same path", before.ID)
	case open && (a.Revision != before.Revision+1 || a.Updated <= before.Updated || a.Opened != before.Opened):
		fail("it follows revision %d of %v, opened %v", before.Revision, before.Updated, before.Opened)
	case !open && (a.Revision != 1 || a.Opened != at || a.State != lifecycle.Open):
		fail("the first issue is not an opening")
	case open && tr.From != before.Level, !open && tr.From != alerting.NoLevel:
		fail("it says that it comes from %s", tr.From)
	case a.Level < alerting.Noticeable || a.Level > alerting.BeyondMargin:
		fail("level %s", a.Level)
	case a.Level > a.Kind.Highest():
		fail("a %s cannot have the level %s", a.Kind, a.Level)
	case a.Kind == alerting.HeadwindLoss && a.Change > 0, a.Kind == alerting.HeadwindGain && a.Change < 0:
		fail("the change is %.2f m/s", a.Change)
	case a.ChangeLow > a.Change || a.Change > a.ChangeHigh:
		fail("the change %.2f is not within %.2f to %.2f m/s", a.Change, a.ChangeLow, a.ChangeHigh)
	case math.Abs(a.PeakChange) < math.Abs(a.Change)-1e-9 || a.PeakAt > at || a.MeasuredAt > at:
		fail("peak %.2f m/s at %v, measured %v", a.PeakChange, a.PeakAt, a.MeasuredAt)
	case !a.Exercise:
		fail("it rests on synthetic readings and is not marked as an exercise")
	}
	if a.State == lifecycle.Closed {
		if a.Closed != at || a.Because == "" {
			fail("closed %v because %q", a.Closed, a.Because)
		}
		r.closed[a.ID] = true
		delete(r.open, key)
		return
	}
	if a.Closed != 0 || a.Because != "" {
		fail("it is open and closed %v because %q", a.Closed, a.Because)
	}
	r.open[key] = a
}

// checkOpen: what the engine shows as open is what was told, and nothing open
// goes untold for more than five seconds.
func (r *recorder) checkOpen(res *engine.Result) {
	shown := r.e.Alerts(nil)
	if len(shown) != len(r.open) {
		r.t.Errorf("%v: the engine shows %d open alerts, %d were told", res.At, len(shown), len(r.open))
	}
	for _, a := range shown {
		told, ok := r.open[a.Operation+" "+a.Runway+" "+string(a.Kind)]
		if !ok || told.ID != a.ID || told.Revision != a.Revision {
			r.t.Errorf("%v: the engine shows %s revision %d, told was %s revision %d", res.At, a.ID, a.Revision, told.ID, told.Revision)
		}
		if res.At.Sub(a.Updated) >= 5*time.Second {
			r.t.Errorf("%v: nothing was told of %s since %v", res.At, a.ID, a.Updated)
		}
	}
}
