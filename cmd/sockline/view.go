package main

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/alerting/engine"
	"sockline/alerting/lifecycle"
	"sockline/alerting/page"
	"sockline/alerting/shear"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/averages"
)

// validFor is how long what is told of a step may be believed.
const validFor = 5 * time.Second

// report is one step in words: what the page, the broker and the log tell.
type report struct {
	At        sensors.Instant
	Condition alerting.Condition
	Live      int // masts
	Ends      []wording.EndWind
	Paths     []wording.PathView
	Stations  []stationHealth
	Notices   []wording.Notice // issued in this step
	Layout    layout
	// What the plan draws: the headwind along every path, and outflows.
	Profiles, Outflows []json.RawMessage
	// Fronts and Vertical are the objects of the fronts and of the columns of air.
	Fronts, Vertical []json.RawMessage
	More             [][]byte // by station: what is remembered of it
	// SharedClock is how far all stations are ahead of this host's clock.
	SharedClock time.Duration
	Why         []string // of each notice, for the log
}

// reporter makes reports. Owned by the loop's goroutine.
type reporter struct {
	cfg       *config.Config
	exercise  bool
	ends      []endMast
	alerts    []lifecycle.Alert // reused
	rejected  []uint64          // by station
	winds     []*windObject     // by station, nil where there is none
	variation func(sensors.Instant) (float64, error)
	layout    layout // as of the day of its variation
	memories  []*mastMemory
	points    []shear.ProfilePoint // reused
}

// endMast is a runway end and the mast that tells its wind.
type endMast struct {
	runway  string
	bearing float64 // degrees true
	mast    int     // index; -1: none within reach
}

func newReporter(cfg *config.Config, exercise bool) *reporter {
	r := &reporter{cfg: cfg, exercise: exercise, rejected: make([]uint64, len(cfg.Stations))}
	for range cfg.Stations {
		r.memories = append(r.memories, &mastMemory{})
	}
	r.variation = func(t sensors.Instant) (float64, error) { return cfg.Airfield.Variation(t.Time()) }
	for _, rw := range cfg.Airfield.Runways {
		for _, e := range rw.Ends {
			r.ends = append(r.ends, endMast{e.Designator, e.Bearing, cfg.Airfield.NearestMast(e.Threshold, cfg.Analysis.Reach)})
		}
	}
	return r
}

// of puts a step into a report. The assessments and the snapshot belong to the
// engine and are copied where the report outlives the step.
func (r *reporter) of(e *engine.Engine, res *engine.Result) *report {
	out := &report{At: res.At, SharedClock: e.SharedClock()}
	r.alerts = e.Alerts(r.alerts[:0])
	observed := 0
	for i := range res.Assessments {
		v := r.path(i, res)
		if v.Assessment.Complete && len(v.Assessment.Observed) > 0 {
			observed++
		}
		out.Paths = append(out.Paths, v)
	}
	for i := range r.cfg.Stations {
		h := r.station(i, e, res)
		if h.Live {
			out.Live++
		}
		r.memories[i].step(res.At, h.Live)
		out.More = append(out.More, r.memories[i].object())
		out.Stations = append(out.Stations, h)
	}
	switch {
	case observed == len(out.Paths) && out.Live > 0:
		out.Condition = alerting.Observing
	case observed > 0 && out.Live > 0:
		out.Condition = alerting.PartlyObserving
	default:
		out.Condition = alerting.Blind
	}
	for _, end := range r.ends {
		out.Ends = append(out.Ends, r.end(end, e, res))
	}
	out.Layout = r.drawn(res.At)
	r.weather(e, res, out)
	r.objects(out, res)
	return out
}

// objects adds the fronts and the columns of air of a step.
func (r *reporter) objects(out *report, res *engine.Result) {
	variation, err := r.variation(res.At)
	if err != nil {
		variation = math.NaN() // then no direction is told
	}
	exercise := r.exercise
	for i := range res.Assessments {
		exercise = exercise || res.Assessments[i].Exercise
	}
	for i := range res.Fronts {
		v := wording.FrontView{Front: res.Fronts[i], At: res.At, Variation: variation, Exercise: exercise}
		out.Fronts = append(out.Fronts, v.JSON())
	}
	for i := range res.Vertical {
		v := wording.VerticalView{Shear: res.Vertical[i], Variation: variation, Exercise: exercise}
		out.Vertical = append(out.Vertical, v.JSON())
	}
}

func (r *reporter) path(i int, res *engine.Result) wording.PathView {
	p := r.cfg.Airfield.Paths[i]
	v := wording.PathView{
		Path: p, Assessment: res.Assessments[i], Exercise: r.exercise,
		At: res.At, ValidUntil: res.At.Add(validFor),
	}
	a := &v.Assessment
	a.Observed, a.Missing = slices.Clone(a.Observed), slices.Clone(a.Missing)
	for _, open := range r.alerts {
		if open.Runway == p.Runway() && open.Operation == p.Operation() {
			v.Alerts = append(v.Alerts, open.ID)
		}
	}
	v.State = wording.StateOf(len(v.Alerts) > 0, a)
	return v
}

func (r *reporter) end(m endMast, e *engine.Engine, res *engine.Result) wording.EndWind {
	w := wording.EndWind{Runway: m.runway, Exercise: r.exercise}
	if m.mast < 0 {
		w.Reason = fmt.Sprintf("no mast stands within %.0f m of it", r.cfg.Analysis.Reach)
		return w
	}
	mast := res.Snapshot.Mast(m.mast)
	w.Exercise = w.Exercise || mast.Exercise
	id := r.cfg.Stations[m.mast].ID
	if mast.State != averages.Live {
		w.Reason = "the mast " + id + " is " + stateWords(mast.State.String())
		return w
	}
	wind, ok := e.Wind(m.mast)
	variation, err := r.variation(res.At)
	switch {
	case !ok:
		w.Reason = "the mast " + id + " has not reported for two minutes yet"
		return w
	case err != nil:
		w.Reason = "the magnetic variation is not known: " + err.Error()
		return w
	}
	w.Observed = true
	mean := wind.Two.Vector
	w.Mean, w.From = mean.Speed(), mean.From()
	w.Gust, w.HasGust = wind.Period.Gust, wind.Gusting
	w.Spread, w.HasSpread = wind.Variation.Spread, true
	w.Variable = wind.Variation.Kind == averages.Variable
	w.Headwind, w.Crosswind = mean.Headwind(m.bearing), mean.CrosswindFromRight(m.bearing)
	w.Variation = variation
	return w
}

// viewOf is the page's view of a step, without alerts.
func viewOf(rep *report, status *wording.Status, made time.Time) *page.View {
	v := &page.View{
		Made: made, At: rep.At, ValidUntil: rep.At.Add(validFor), Condition: rep.Condition,
		Remarks: remarks(status), Exercise: status.Exercise, StatusJSON: status.JSON(),
		LayoutJSON: rep.Layout.json, LayoutID: rep.Layout.id,
		Profiles: rep.Profiles, Outflows: rep.Outflows,
		Fronts: rep.Fronts, Vertical: rep.Vertical,
	}
	for _, e := range rep.Ends {
		v.Ends = append(v.Ends, page.End{Runway: e.Runway, Observed: e.Observed, Sentence: wording.EndText(e), JSON: e.JSON()})
	}
	for i := range rep.Paths {
		p := &rep.Paths[i]
		// Its sentence names the ground that is not observed.
		v.Paths = append(v.Paths, page.Path{Name: p.Path.Name(), State: p.State, Sentence: p.Text(), JSON: p.JSON()})
		v.Exercise = v.Exercise || p.Assessment.Exercise
	}
	for i := range rep.Stations {
		h := &rep.Stations[i]
		v.Stations = append(v.Stations, page.Station{
			ID: h.ID, State: h.State, Live: h.Live, Sentence: h.sentence(), JSON: h.object(), More: rep.More[i],
		})
		switch {
		case !h.Live:
			v.MastsOut = append(v.MastsOut, h.ID)
		case h.AgeS != nil && (v.AgeS == nil || *h.AgeS > *v.AgeS):
			v.AgeS = h.AgeS
		}
	}
	return v
}

// remarks is what the page says of the daemon itself.
func remarks(s *wording.Status) []string {
	out := slices.Clone(s.Remarks)
	if s.Degraded != "" {
		out = append(out, "The history may miss what is told now: "+strings.TrimSuffix(s.Degraded, ".")+".")
	}
	return out
}
