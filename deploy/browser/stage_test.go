package browser_test

import (
	"encoding/json"
	"fmt"
	"math"
	"net"
	"net/http"
	"sync"
	"testing"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/rs/zerolog"

	"sockline/alerting"
	"sockline/alerting/page"
	"sockline/sensors"
)

// stage serves the real page over a view that the test writes: weather and
// faults that no scene brings at the moment when they are wanted.
type stage struct {
	url    string
	tape   *page.Tape
	events []json.RawMessage

	mu       sync.Mutex
	view     *page.View
	change   func(*page.View) // applied to every new view
	frozen   bool             // views are made anew, but of the same step
	exercise bool
	seq      uint64
	conns    map[net.Conn]bool
}

// newStage serves until the test ends, with a step each second.
func newStage(t *testing.T, change func(*page.View)) *stage {
	t.Helper()
	s := &stage{tape: page.NewTape("stage"), change: change, conns: map[net.Conn]bool{}}
	p, err := page.New(page.Options{
		Airfield: "Skerry Moor", Listen: "127.0.0.1:0", View: s.current, Tape: s.tape, History: s,
		Registry: prometheus.NewRegistry(), Now: time.Now, Log: zerolog.Nop(),
	})
	if err != nil {
		t.Fatal(err)
	}
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	s.url = "http://" + l.Addr().String()
	server := &http.Server{Handler: p, ConnState: func(c net.Conn, state http.ConnState) {
		s.mu.Lock()
		defer s.mu.Unlock()
		if state == http.StateClosed || state == http.StateHijacked {
			delete(s.conns, c)
		} else {
			s.conns[c] = true
		}
	}}
	stop, stopped := make(chan struct{}), make(chan struct{})
	s.step()
	go func() {
		defer close(stopped)
		tick := time.NewTicker(time.Second)
		defer tick.Stop()
		for {
			select {
			case <-tick.C:
				s.step()
			case <-stop:
				return
			}
		}
	}()
	go func() { _ = server.Serve(l) }()
	t.Cleanup(func() {
		close(stop)
		<-stopped
		_ = server.Close()
	})
	return s
}

func (s *stage) current() *page.View {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.view
}

// Events and Event make the stage a History.
func (s *stage) Events(page.EventQuery) ([]page.Event, error) {
	var list []page.Event
	for _, e := range s.events {
		list = append(list, page.Event{Object: e})
	}
	return list, nil
}

// Event is every issue of an event.
func (s *stage) Event(id string) ([]json.RawMessage, error) {
	for _, e := range s.events {
		var x struct{ ID string }
		if json.Unmarshal(e, &x) == nil && x.ID == id {
			return []json.RawMessage{e}, nil
		}
	}
	return nil, page.ErrNoEvent
}

// cut breaks every connection off.
func (s *stage) cut() {
	s.mu.Lock()
	defer s.mu.Unlock()
	for c := range s.conns {
		_ = c.Close()
	}
}

// set changes what the next views hold, and makes one.
func (s *stage) set(change func(*page.View)) {
	s.mu.Lock()
	s.change = change
	s.mu.Unlock()
	s.step()
}

func (s *stage) step() {
	s.mu.Lock()
	defer s.mu.Unlock()
	now := time.Now()
	at := sensors.At(now.Truncate(time.Second))
	if s.frozen && s.view != nil {
		at = s.view.At
	}
	s.seq++
	v := stormy(at)
	v.Seq, v.Made, v.Exercise = s.seq, now, s.exercise
	if s.change != nil {
		s.change(v)
	}
	s.view = v
	s.tape.Turn()
}

// object is JSON of whatever is given.
func object(v any) json.RawMessage {
	b, err := json.Marshal(v)
	if err != nil {
		panic(err) // only texts and numbers are given
	}
	return b
}

type dict map[string]any

// The airfield of the stage: the one runway of Skerry Moor, laid out plainly.
const bearing07 = 64.0

func thresholdOf(runway string) (e, n float64) {
	a := bearing07 * math.Pi / 180
	if runway == "25" {
		return 640 * math.Sin(a), 640 * math.Cos(a)
	}
	return -640 * math.Sin(a), -640 * math.Cos(a)
}

func bearingOf(runway string) float64 {
	if runway == "25" {
		return bearing07 + 180
	}
	return bearing07
}

type stagePath struct{ runway, operation string }

var stagePaths = [...]stagePath{{"07", "landing"}, {"07", "take-off"}, {"25", "landing"}, {"25", "take-off"}}

func (p stagePath) reach() (from, to float64) {
	if p.operation == "landing" {
		return 5000, -1280
	}
	return 0, -6280
}

var stageMasts = [...]struct {
	id             string
	before, beside float64 // metres before the threshold of 07, and to the right
}{{"touch07", 0, 60}, {"touch25", -1280, -60}, {"mid-north", -640, -1200}, {"mid-south", -640, 1200}, {"final07", 2000, 30}, {"final25", -3280, -30}, {"far07", 3800, 30}, {"far25", -5080, -30}}

func mastPlace(before, beside float64) (e, n float64) {
	a := bearing07 * math.Pi / 180
	e0, n0 := thresholdOf("07")
	return e0 - before*math.Sin(a) + beside*math.Cos(a), n0 - before*math.Cos(a) - beside*math.Sin(a)
}

func stageLayout() []byte {
	end := func(r string) dict {
		e, n := thresholdOf(r)
		return dict{"designator": r, "east_m": e, "north_m": n, "bearing_true_deg": bearingOf(r)}
	}
	var paths, masts []dict
	for _, p := range stagePaths {
		e, n := thresholdOf(p.runway)
		from, to := p.reach()
		paths = append(paths, dict{"runway": p.runway, "operation": p.operation, "east_m": e, "north_m": n,
			"bearing_true_deg": bearingOf(p.runway), "length_from_m": from, "length_to_m": to})
	}
	for _, m := range stageMasts {
		e, n := mastPlace(m.before, m.beside)
		masts = append(masts, dict{"id": m.id, "east_m": e, "north_m": n, "height_m": 10})
	}
	return object(dict{"airfield": "skerrymoor", "name": "Skerry Moor", "variation_deg": -6.1, "reach_m": 1000,
		"runways": []dict{{"ends": []dict{end("07"), end("25")}, "width_m": 18, "length_m": 1280}}, "paths": paths, "masts": masts})
}

// stageAlert is an open alert of the stage.
func stageAlert(at sensors.Instant, p stagePath, kind, level string, change, from, to float64, text string) page.Alert {
	id := fmt.Sprintf("skerrymoor-20260701T141503Z-%s-%s-%s", p.runway, p.operation, kind)
	l, ok := alerting.LevelOf(level)
	if !ok {
		panic(level) // the tests name only levels that there are
	}
	return page.Alert{ID: id, Kind: alerting.Kind(kind), Level: l, Observed: true, Sentence: text, JSON: object(dict{
		"id": id, "occurrence": "skerrymoor-20260701T141503Z", "revision": 3, "airfield": "skerrymoor", "runway": p.runway, "operation": p.operation,
		"kind": kind, "level": level, "state": "open", "opened": at.Time().Add(-90 * time.Second).Format(time.RFC3339), "updated": at.Time().Format(time.RFC3339),
		"closed": nil, "closed_because": nil, "change_kt": change, "change_low_kt": change - 6, "change_high_kt": change + 6, "probability": 0.97,
		"from_m": from, "to_m": to, "observed": true, "cause": "outflow", "trend": "growing", "peak": dict{"change_kt": change, "at": at.Time().Format(time.RFC3339)},
		"stations": dict{"used": []string{"far07", "final07"}, "missing": []string{}}, "text": text, "recorded": true, "exercise": false, "notice": alerting.Notice,
	})}
}

// stormy is a view with everything in it: alerts, an outflow, a front, a mast
// that is out and ground that is not observed.
func stormy(at sensors.Instant) *page.View {
	age := 0.4
	v := &page.View{
		At: at, ValidUntil: at + 5*sensors.Second, Condition: alerting.PartlyObserving,
		AgeS: &age, MastsOut: []string{"far25"}, LayoutJSON: stageLayout(), LayoutID: "stage-1",
		StatusJSON: object(dict{"condition": "partly-observing", "instance": "stage-1", "version": "0.0", "stations": dict{"live": 7, "total": 8},
			"broker": dict{"connected": true, "subscribed": true}, "clock_offset_s": 0.1, "history": dict{"degraded": false, "reason": ""}, "remarks": []string{}}),
	}
	loss := "The headwind falls by about 28 kt (22 to 34) on the way down to runway 07, between 2.9 and 1.2 km before the threshold, at mast height; growing. Level 3 of 3: more than the stall margin of the slowest aircraft here."
	gain := "The headwind rises by about 12 kt (9 to 15) after take-off from runway 07, between 1.4 and 2.8 km from the start of the roll, at mast height. Level 1 of 3: a noticeable change."
	v.Alerts = []page.Alert{
		stageAlert(at, stagePaths[0], "headwind-loss", "beyond-margin", -28, 2900, 1200, loss),
		stageAlert(at, stagePaths[1], "headwind-gain", "noticeable", 12, -1400, -2800, gain),
	}
	since := at.Time().Add(-90 * time.Second).Format(time.RFC3339)
	v.Occurrences = []page.Occurrence{
		{ID: "skerrymoor-20260701T141503Z", Sentence: loss, Level: "beyond-margin", State: "raised-unseen", Since: since, Trend: "growing", Alerts: []string{v.Alerts[0].ID}, Sound: "second"},
		{ID: "skerrymoor-20260701T141507Z", Sentence: gain, Level: "noticeable", State: "raised-unseen", Since: since, Trend: "steady", Alerts: []string{v.Alerts[1].ID}, Sound: "first"},
	}
	v.Ends = []page.End{
		{Runway: "07", Observed: true, Sentence: "From 240 degrees magnetic.", JSON: object(dict{"runway": "07", "observed": true, "sentence": "From 240 degrees magnetic.",
			"from_magnetic_deg": 240, "from_spread_deg": 40, "speed_kt": 14.2, "gust_kt": 24.6, "headwind_kt": -13.1, "crosswind_kt": 5.2, "crosswind_from": "left"})},
		{Runway: "25", Sentence: "Wind at runway 25: not observed, because the mast touch25 is stale.", JSON: object(dict{"runway": "25", "observed": false, "sentence": "Wind at runway 25: not observed, because the mast touch25 is stale.",
			"from_magnetic_deg": nil, "from_spread_deg": nil, "speed_kt": nil, "gust_kt": nil, "headwind_kt": nil, "crosswind_kt": nil, "crosswind_from": nil})},
	}
	stagePathsOf(v)
	stageMastsOf(v, at)
	stageWeather(v, at)
	return v
}

func stagePathsOf(v *page.View) {
	states := []alerting.PathState{alerting.Raised, alerting.BelowLimits, alerting.NotObserved, alerting.BelowLimits}
	for i, p := range stagePaths {
		observed := [][2]float64{{4010, -1280}}
		if p.operation == "take-off" {
			observed = [][2]float64{{0, -5000}}
		}
		if states[i] == alerting.NotObserved {
			observed = [][2]float64{{1200, -1280}}
		}
		change := func(kt, from, to float64) dict {
			return dict{"change_kt": kt, "low_kt": kt - 3, "high_kt": kt + 3, "probability": dict{}, "from_m": from, "to_m": to}
		}
		path := dict{"runway": p.runway, "operation": p.operation, "state": string(states[i]), "reason": "", "observed": observed,
			"headwind_change": dict{"loss": change(-6, observed[0][0]-300, observed[0][0]-1300), "gain": change(4, observed[0][0]-500, observed[0][0]-900)}, "alerts": []string{}, "exercise": false, "notice": alerting.Notice}
		if states[i] == alerting.NotObserved {
			path["reason"], path["headwind_change"] = "the mast far25 is stale", nil
		}
		v.Paths = append(v.Paths, page.Path{Name: p.operation + " " + p.runway, State: states[i], JSON: object(path)})
		from, to := p.reach()
		var points []dict
		for at := from; at >= to; at -= 200 {
			seen := at <= observed[0][0] && at >= observed[0][1]
			h := -8 + 24/(1+math.Exp(-(at-2000)/350))
			point := dict{"at_m": at, "observed": seen, "headwind_kt": h, "low_kt": h - 4, "high_kt": h + 4}
			if !seen {
				point["headwind_kt"], point["low_kt"], point["high_kt"] = nil, nil, nil
			}
			points = append(points, point)
		}
		v.Profiles = append(v.Profiles, object(dict{"runway": p.runway, "operation": p.operation, "points": points}))
	}
}

func stageMastsOf(v *page.View, at sensors.Instant) {
	states := []string{"live", "live", "late", "starting", "live", "under-maintenance", "live", "stale"}
	for i, m := range stageMasts {
		live := states[i] == "live" || states[i] == "late"
		speed, from := 6+2.5*float64(i), 200+12*float64(i)
		v.Stations = append(v.Stations, page.Station{ID: m.id, State: states[i], Live: live, JSON: object(dict{
			"id": m.id, "state": states[i], "live": live, "age_s": 0.4, "messages": 4000, "readings": 3990, "suspect": 6, "rejected": 4, "problem": "speed 999 m/s is more than any instrument measures",
			"wind":  dict{"two_minutes": dict{"speed_ms": speed, "from_deg": from, "min_ms": speed - 3, "max_ms": speed + 5}},
			"clock": dict{"ahead_s": 0.1, "off": false, "corrected_s": 0}, "neighbours": dict{"hours": 14, "turned_deg": []float64{-4, 1, 6}, "speed_ratio": []float64{0.95, 1.01, 1.06}, "named": []string{}, "doubt": 0.02},
			"maintenance": nil, "book": dict{"model": "two-cup", "serial": "A-17", "installed": "2024-05-01", "calibrated": "2026-02-10", "next_due": "2026-06-01", "overdue": true, "notes": ""},
			"findings": []string{}, "at": at.Time().Format(time.RFC3339), "exercise": false, "notice": alerting.Notice,
		})})
	}
}

func stageWeather(v *page.View, at sensors.Instant) {
	e0, n0 := mastPlace(2000, 200)
	ring := func(r float64) [][2]float64 {
		var out [][2]float64
		for a := 0.0; a < 2*math.Pi; a += 0.3 {
			out = append(out, [2]float64{e0 + r*math.Sin(a), n0 + 0.7*r*math.Cos(a)})
		}
		return out
	}
	v.Outflows = []json.RawMessage{object(dict{"probability": 0.93, "centre": dict{"east_m": e0, "north_m": n0}, "inner": ring(300), "outer": ring(900),
		"radius_m": 1100, "radius_low_m": 800, "radius_high_m": 1500, "differential_kt": 30, "low_kt": 24, "high_kt": 36, "over_m": 2200, "extent": "microburst",
		"motion": dict{"known": true, "toward_true_deg": 70, "speed_kt": 12, "east_ms": 5.8, "north_ms": 2.1}, "trend": "growing", "reaches": []any{},
		"text": "An outflow stands 2.0 km before runway 07: the wind differs by about 30 kt (24 to 36) over 2.2 km. It moves east-north-east at 12 kt."})}
	a, an := mastPlace(-3500, -2200)
	b, bn := mastPlace(-3900, 2200)
	te, tn := thresholdOf("25")
	v.Fronts = []json.RawMessage{object(dict{"kind": "gust-front", "line": [][2]float64{{a, an}, {b, bn}}, "band_m": 260, "toward_true_deg": 244, "speed_kt": 22, "speed_low_kt": 18, "speed_high_kt": 27,
		"change_kt": 18, "turn_deg": 60, "arrivals": []dict{{"place": "threshold 25", "east_m": te, "north_m": tn, "at": at.Time().Add(4 * time.Minute).Format(time.RFC3339), "earliest": "", "latest": "", "arrived": false}},
		"text": "A gust front comes from the east-north-east at 22 kt (18 to 27); it is at the threshold of runway 25 in about 4 minutes."})}
}

func mustJSON(data []byte, into any) {
	if err := json.Unmarshal(data, into); err != nil {
		panic(err) // it was made by object
	}
}

// with is an object with other values under some of its names.
func with(data json.RawMessage, pairs ...string) json.RawMessage {
	var m map[string]any
	mustJSON(data, &m)
	for i := 0; i < len(pairs); i += 2 {
		m[pairs[i]] = pairs[i+1]
	}
	return object(m)
}
