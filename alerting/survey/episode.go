package survey

import (
	"math"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/engine"
	"sockline/sensors"
	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
)

// Episode is what the engine made of one drawn episode. Speeds in knots unless
// said otherwise: whole records are kept, and small ones.
type Episode struct {
	Index    int                 `json:"i"`
	Kind     synthetic.StudyKind `json:"kind"`
	Wind     float64             `json:"wind_ms"`   // mean wind, m/s
	Eddies   float64             `json:"eddies_ms"` // their standard deviation, m/s
	Fault    string              `json:"fault,omitempty"`
	Model    string              `json:"model,omitempty"`
	Stretch  float64             `json:"stretch,omitempty"`
	Strength float64             `json:"strength_kt,omitempty"` // change from side to side at mast height
	Hours    float64             `json:"hours"`                 // that count
	Cases    []Case              `json:"cases"`                 // ground after ground, its loss and its gain
	Centre   *CentreError        `json:"centre,omitempty"`
	Arrivals []ArrivalError      `json:"arrivals,omitempty"`
}

// Case is one side of one ground in one episode.
type Case struct {
	Path    int      `json:"path"`
	Gain    bool     `json:"gain,omitempty"`
	Peak    float64  `json:"peak_kt"`  // greatest true change on observed ground
	PeakAll float64  `json:"whole_kt"` // greatest true change on the whole path
	Along   *float64 `json:"along_m,omitempty"`
	Beside  *float64 `json:"beside_m,omitempty"` // where an outflow stood at that moment, from the path
	Passed  int      `json:"passed_s,omitempty"` // when the true change first reached the level
	Opened  int      `json:"opened_s,omitempty"` // when level 2 or more was first open while the change was there
	False   int      `json:"false,omitempty"`    // openings of level 2 or more without it
	// Steps counts the steps by the class of the true change: all of them, those
	// whose interval holds it, those whose interval lies above it.
	Steps [][3]int `json:"steps"`
	// Told counts the same by the class of the median that was told, and Sure, by
	// tenths of the probability told of the level, the steps and those in which the
	// true change reached it.
	Told  [][3]int                 `json:"told"`
	Sure  [probabilityCount][2]int `json:"sure"`
	Found []uint32                 `json:"found"`           // by confidence, a bit for each level tried
	Cells []Cell                   `json:"cells,omitempty"` // false openings of the levels tried
	First []int                    `json:"first,omitempty"` // of the test that knows size and place: first second at each limit, 0 never
	Top   float64                  `json:"top_z,omitempty"` // its greatest z
	Knows bool                     `json:"knows,omitempty"` // it could be made
}

// CentreError is how far the centre told of an outflow lay from the true one at
// the moment of its greatest loss on any path, where that was large.
type CentreError struct {
	Told   bool    `json:"told"`
	Off    float64 `json:"off_m"`
	Inside bool    `json:"inside"` // the true one stood among the masts
}

// ArrivalError is how a gust front's arrival at a threshold was foretold one
// minute ahead of it.
type ArrivalError struct {
	Told bool    `json:"told"`
	Off  float64 `json:"off_s"` // told less true
}

// changeClasses are the lower ends of the classes of the true change for the
// coverage, kt.
func changeClasses() [changeClassCount]float64 { return [...]float64{0, 5, 10, 12, 15, 20, 25, 30} }

const changeClassCount = 8

// probabilityCount is how many classes of probability there are, alike wide.
const probabilityCount = 10

func changeClass(kt float64) int {
	class := 0
	for i, low := range changeClasses() {
		if kt >= low {
			class = i
		}
	}
	return class
}

// track follows one case through an episode.
type track struct {
	*Case
	sweep sweep
	truth [recent]float64 // of the last minute, m/s
	level alerting.Level  // of the alert that is open
}

// player plays episodes over a network, one after another.
type player struct {
	network *Network
	study   synthetic.Study
	grounds []*ground
	hull    []airfield.Point // of the masts
	brief   time.Duration
}

func newPlayer(n *Network, p Plan) *player {
	masts, _ := n.standing()
	return &player{network: n, study: n.study(p), grounds: grounds(n), hull: hull(masts), brief: p.brief}
}

// play runs episode i.
func (p *player) play(i int) (Episode, error) {
	scene := p.study.Episode(i)
	if p.brief > 0 {
		scene.Length = p.brief
	}
	out := Episode{Index: i, Kind: p.study.Kind(i), Wind: round(scene.Speed, 100), Eddies: round(scene.Eddies.Deviation, 100),
		Hours: (synthetic.StudyLength - synthetic.StudyWarmUp).Hours()}
	if len(scene.Faults) > 0 {
		out.Fault = string(scene.Faults[0].Kind)
	}
	if len(scene.Outflows) > 0 {
		o := &scene.Outflows[0]
		out.Model, out.Stretch, out.Strength = string(o.Model), round(o.Stretch, 100), round(quantity.Knots(2*o.Strength), 10)
	}
	run, err := p.begin(scene)
	if err != nil {
		return out, err
	}
	var knows *reference
	look := p.study.Reference(i, scene)
	if out.Kind != synthetic.StudyFront && out.Fault == "" {
		knows = newReference(p.network, scene, look)
	}
	large := p.network.Settings.Levels.Large
	tracks := p.tracks(&out)
	awaited := p.thresholds(scene)
	greatest := 0.0 // true loss on any ground so far, m/s
	for {
		found, second, more := run.next()
		if !more {
			break
		}
		for k := range awaited {
			awaited[k].see(found, second)
		}
		for k, g := range p.grounds {
			truth := g.look(run.sampler.Weather(), float64(second))
			for side := range 2 {
				tracks[2*k+side].see(run, found, second, truth, large)
			}
			if t := &tracks[2*k]; knows != nil && second > warmUp {
				unit := g.lookAt(&knows.outflow, float64(second)).loss
				if z, ok := knows.look(found.Snapshot, float64(second), unit, large); ok {
					t.pass(second, z)
				}
			}
			if len(scene.Outflows) > 0 && second > warmUp {
				p.place(&tracks[2*k], &scene.Outflows[0], g, second)
				if truth.loss > greatest && truth.loss >= large {
					greatest = truth.loss
					out.Centre = p.centre(found, &scene.Outflows[0], second)
				}
			}
		}
	}
	for k := range tracks {
		tracks[k].end()
	}
	for _, a := range awaited {
		out.Arrivals = append(out.Arrivals, a.ArrivalError)
	}
	return out, nil
}

const warmUp = int(synthetic.StudyWarmUp / time.Second)

// tracks makes the cases of an episode.
func (p *player) tracks(e *Episode) []track {
	e.Cases = make([]Case, 2*len(p.grounds))
	tracks := make([]track, len(e.Cases))
	for k := range tracks {
		e.Cases[k] = Case{Path: p.grounds[k/2].path, Gain: k%2 == 1, Steps: make([][3]int, changeClassCount), Told: make([][3]int, changeClassCount)}
		tracks[k].Case = &e.Cases[k]
		tracks[k].sweep.hysteresis = p.network.Settings.Levels.Hysteresis
		tracks[k].sweep.hold = int(p.network.Settings.Hold / time.Second)
	}
	return tracks
}

// run is a scene on its way through an engine of its own.
type run struct {
	engine   *engine.Engine
	sampler  *synthetic.Sampler
	readings []sensors.Reading
	step     sensors.Instant
}

func (p *player) begin(scene *synthetic.Scene) (*run, error) {
	sampler, err := scene.NewSampler(p.network.Specs)
	if err != nil {
		return nil, err
	}
	settings := p.network.Settings
	settings.Exercise = true
	e, err := engine.New(settings)
	if err != nil {
		return nil, err
	}
	return &run{engine: e, sampler: sampler, step: scene.Start}, nil
}

// next plays one second; false at the end.
func (r *run) next() (found *engine.Result, second int, more bool) {
	if r.readings, more = r.sampler.Next(r.readings[:0]); !more {
		return nil, 0, false
	}
	for _, reading := range r.readings {
		r.engine.Offer(reading)
	}
	r.step += sensors.Second
	return r.engine.Step(r.step), r.sampler.Second(), true
}

// see takes a step.
func (t *track) see(r *run, found *engine.Result, second int, c change, large float64) {
	now, all := c.loss, c.lossAll
	kind := alerting.HeadwindLoss
	if t.Gain {
		now, all, kind = c.gain, c.gainAll, alerting.HeadwindGain
	}
	t.truth[second%recent] = now
	was := t.level
	for i := range found.Transitions {
		a := &found.Transitions[i].Alert
		if a.Path == t.Path && a.Kind == kind {
			if t.level = a.Level; a.Closed != 0 {
				t.level = alerting.NoLevel
			}
		}
	}
	if second <= warmUp {
		return
	}
	t.Peak, t.PeakAll = max(t.Peak, quantity.Knots(now)), max(t.PeakAll, quantity.Knots(all))
	if now >= large && t.Passed == 0 {
		t.Passed = second
	}
	peak := 0.0
	for _, m := range t.truth {
		peak = max(peak, m)
	}
	there := peak >= falseShare*large
	switch {
	case t.level < alerting.Large:
	case there && t.Opened == 0:
		t.Opened = second
	case !there && was < alerting.Large:
		t.False++
	}
	t.cover(r, found, second, now, large, there)
}

// cover counts whether the interval holds the truth, and tries other levels.
func (t *track) cover(r *run, found *engine.Result, second int, now, large float64, there bool) {
	stretch, _ := r.engine.Stretch(t.Path)
	if stretch == nil {
		return
	}
	c, side := &found.Assessments[t.Path].Loss, &stretch.Loss
	if t.Gain {
		c, side = &found.Assessments[t.Path].Gain, &stretch.Gain
	}
	for _, n := range [...]*[3]int{&t.Steps[changeClass(quantity.Knots(now))], &t.Told[changeClass(quantity.Knots(c.Median))]} {
		n[0]++
		switch {
		case now < c.Low:
			n[2]++
		case now <= c.High:
			n[1]++
		}
	}
	sure := &t.Sure[min(int(probabilityCount*side.AtLeast(large)), probabilityCount-1)]
	sure[0]++
	if now >= large {
		sure[1]++
	}
	t.sweep.step(second, side, there)
}

// pass takes z of the test that knows size and place.
func (t *track) pass(second int, z float64) {
	if t.First == nil {
		t.First, t.Knows, t.Top = make([]int, zCount), true, z
	}
	t.Top = max(t.Top, z)
	for i := range t.First {
		if t.First[i] == 0 && z >= float64(i)*zStep {
			t.First[i] = second
		}
	}
}

// place keeps where the outflow stood when the loss was greatest.
func (p *player) place(t *track, o *synthetic.Outflow, g *ground, second int) {
	if quantity.Knots(t.truth[second%recent]) < t.Peak {
		return
	}
	along, beside := g.p.Along(o.Centre(float64(second)))
	along, beside = math.Round(along), math.Round(beside)
	t.Along, t.Beside = &along, &beside
}

// awaited is a threshold that a gust front comes to.
type awaited struct {
	ArrivalError
	x, y, at float64 // m, and the true time of arrival, s
}

// thresholds are those that the front of an episode reaches while it counts.
func (p *player) thresholds(scene *synthetic.Scene) (all []awaited) {
	if len(scene.Fronts) == 0 {
		return nil
	}
	for _, r := range p.network.Settings.Airfield.Runways {
		for _, e := range r.Ends {
			at := scene.Fronts[0].Reaches(e.Threshold.X, e.Threshold.Y)
			if at > float64(warmUp+ahead) && at < float64(scene.Seconds()) {
				all = append(all, awaited{x: e.Threshold.X, y: e.Threshold.Y, at: at})
			}
		}
	}
	return all
}

// ahead is how long before the arrival it is asked for, s.
const ahead = 60

// see takes what is foretold one minute ahead.
func (a *awaited) see(found *engine.Result, second int) {
	if second != int(math.Round(a.at))-ahead {
		return
	}
	start := found.At - sensors.Instant(second)*sensors.Second
	surest := 0.0
	for i := range found.Fronts {
		for _, place := range found.Fronts[i].Arrivals {
			if place.Mast >= 0 || math.Hypot(place.X-a.x, place.Y-a.y) > 1 || place.At == 0 || found.Fronts[i].Confidence <= surest {
				continue
			}
			surest = found.Fronts[i].Confidence
			a.Told, a.Off = true, round(place.At.Sub(start).Seconds()-a.at, 10)
		}
	}
}

// centre compares the likeliest outflow that is told with the true one.
func (p *player) centre(found *engine.Result, o *synthetic.Outflow, second int) *CentreError {
	x, y := o.Centre(float64(second))
	c := &CentreError{Inside: within(airfield.Point{X: x, Y: y}, p.hull)}
	likeliest := 0.0
	for i := range found.Outflows {
		if f := &found.Outflows[i]; f.Probability > likeliest {
			likeliest = f.Probability
			c.Told, c.Off = true, math.Round(math.Hypot(f.X-x, f.Y-y))
		}
	}
	return c
}

// end brings the case into the form in which it is kept.
func (t *track) end() {
	t.Peak, t.PeakAll, t.Top = round(t.Peak, 100), round(t.PeakAll, 100), round(t.Top, 100)
	t.Found = append(t.Found, t.sweep.found[:]...)
	t.Cells = t.sweep.cells()
}

// round cuts what a record need not hold, so that it is the same whether it was
// written down and read back or not.
func round(x, parts float64) float64 { return math.Round(x*parts) / parts }
