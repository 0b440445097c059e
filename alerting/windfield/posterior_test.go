package windfield

import (
	"math"
	"slices"
	"testing"
	"time"

	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quality"
)

// epoch is a whole UTC minute.
const epoch = sensors.Instant(1_782_907_200_000)

// site is masts that report every second, and what they say.
type site struct {
	t        testing.TB
	stations []sensors.Station
	recorder *averages.Recorder
	layout   averages.Layout
}

func newSite(t testing.TB, masts int) *site {
	s := &site{t: t, layout: averages.NewLayout(30 * time.Second)}
	for range masts {
		s.stations = append(s.stations, sensors.Station{Interval: time.Second, StaleAfter: 3 * time.Second})
	}
	s.recorder = averages.NewRecorder(s.stations, s.layout)
	return s
}

// report gives every mast its wind at second k. A new checker for each reading:
// these tests need winds that stand still.
func (s *site) report(k int, wind func(mast int) (u, v float64)) {
	s.t.Helper()
	at := epoch + sensors.Instant(k)*sensors.Second
	for i, st := range s.stations {
		u, v := wind(i)
		from := math.Atan2(-u, -v) * 180 / math.Pi
		if from < 0 {
			from += 360
		}
		c := quality.NewChecker(st).Check(sensors.Reading{Station: i, Time: at, Arrival: at, Speed: math.Hypot(u, v), From: from})
		if !c.Usable() {
			s.t.Fatalf("mast %d at %d s: a wind of %g, %g is refused", i, k, u, v)
		}
		s.recorder.Add(c)
	}
}

// newestOnly is a snapshot in which only the newest block of each mast holds
// its wind, and the turbulence before it was none: so that the observations
// are one vector a mast with a known error.
func (s *site) newestOnly(wind func(mast int) (u, v float64)) *averages.Snapshot {
	const quiet, last = 900, 1000
	for k := 1; k <= quiet; k++ {
		s.report(k, wind)
	}
	for k := 1; k <= 16; k++ { // the turbulence is estimated on whole minutes
		s.recorder.Snapshot(epoch + sensors.Instant(60*k)*sensors.Second)
	}
	// 10 s fill the newest block, 10 more make the mast live, not the second block.
	for k := last - 19; k <= last; k++ {
		s.report(k, wind)
	}
	snapshot := s.recorder.Snapshot(epoch + last*sensors.Second)
	for i := range s.stations {
		m := snapshot.Mast(i)
		if m.State != averages.Live || !m.Blocks[0].Present || m.Blocks[1].Present || m.Blocks[2].Present || m.Turbulence.Seconds == 0 {
			s.t.Fatalf("mast %d is not as this test needs it: %+v", i, *m)
		}
	}
	return snapshot
}

// single is a prior of one field that does not change in time, without
// outflows and fronts: plain optimal interpolation.
func single(f Field, mean, observation float64) Prior {
	f.Time = 1e15
	p := DefaultPrior()
	p.Fields, p.Disturbed = []Field{f}, nil
	p.MeanDeviation, p.DriftDeviation = mean, 0
	p.Instrument = math.Sqrt(observation*observation - noiseLeast) // the least noise comes on top
	p.OutflowShare, p.FrontShare = 0, 0
	p.OutflowSpacing, p.FrontSpacing = 2500, 2500
	return p
}

// posteriorCase is a worked case of optimal interpolation of a wind.
type posteriorCase struct {
	name    string
	prior   Prior
	x, y    []float64
	u, v    []float64
	targets []posteriorTarget
}

type posteriorTarget struct{ x, y, u, v, sdU, sdV float64 }

// cases are one worked out in plain Python, with the divergence that it must
// have, and those sets of the outside table whose parts have one length, which
// is what a Field has.
func cases(t *testing.T) []posteriorCase {
	all := []posteriorCase{{
		name:  "worked case",
		prior: single(Field{Deviation: 6, Length: 1500, Irrotational: 0.7}, 5, 1),
		x:     []float64{-1000, 1000, 0}, y: []float64{0, 0, 1000},
		u: []float64{-8, 11, 2}, v: []float64{1, -1, 9},
		targets: []posteriorTarget{
			{0, 0, 1.93269, 1.05950, 3.0803, 2.6654},
			{0, -1000, 1.58933, -3.82394, 5.0501, 5.2422},
			{500, 0, 7.60253, 0.18071, 2.3147, 2.0309},
		},
	}}
	words, rows := table(t, "gp_wind_post.csv")
	for name, s := range windSets(t) {
		if s.lphi != s.lpsi {
			continue
		}
		total := s.sphi*s.sphi + s.spsi*s.spsi
		c := posteriorCase{
			name:  "set " + name,
			prior: single(Field{Deviation: math.Sqrt(total), Length: s.lphi, Irrotational: s.sphi * s.sphi / total}, s.mean, s.so),
			x:     s.x, y: s.y, u: s.u, v: s.v,
		}
		for i, r := range rows {
			if words[i]["set"] == name {
				c.targets = append(c.targets, posteriorTarget{r["x_m"], r["y_m"], r["u_mean"], r["v_mean"], r["u_sd"], r["v_sd"]})
			}
		}
		all = append(all, c)
	}
	if len(all) < 3 {
		t.Fatalf("there are %d cases", len(all))
	}
	return all
}

// A step with a single field is optimal interpolation: means and deviations at
// the targets are those of the worked cases.
func TestStepIsOptimalInterpolation(t *testing.T) {
	for _, c := range cases(t) {
		t.Run(c.name, func(t *testing.T) {
			var masts []Mast
			for i := range c.x {
				masts = append(masts, Mast{X: c.x[i], Y: c.y[i]})
			}
			// A flight toward the west meets the east component as headwind, one
			// toward the south the north component.
			var targets []Target
			for _, w := range c.targets {
				targets = append(targets, Target{w.x, w.y, -1, 0}, Target{w.x, w.y, 0, -1})
			}
			s := newSite(t, len(masts))
			e := New(masts, targets, s.layout, c.prior)
			p := e.Step(s.newestOnly(func(i int) (u, v float64) { return c.u[i], c.v[i] }))
			if p == nil {
				t.Fatal("there is no posterior")
			}
			nt := len(targets)
			for i, w := range c.targets {
				// The blocks without data weigh a ten-thousandth.
				agree(t, i, "u", p.Mean[2*i], w.u, 5e-3)
				agree(t, i, "v", p.Mean[2*i+1], w.v, 5e-3)
				// 128 draws in pairs of opposites know a deviation to 9 %; three
				// times that.
				agree(t, i, "sd of u", spread(p.Draws, 2*i, nt), w.sdU, 0.27*w.sdU)
				agree(t, i, "sd of v", spread(p.Draws, 2*i+1, nt), w.sdV, 0.27*w.sdV)
			}
			if p.OutflowShare != 0 {
				t.Errorf("without outflows in the prior their share is %g", p.OutflowShare)
			}
			checkFactor(t, e, c)
		})
	}
}

// checkFactor compares the exact covariance that the draws are made with.
func checkFactor(t *testing.T, e *Estimator, c posteriorCase) {
	t.Helper()
	nt := len(e.targets)
	for _, kept := range e.cache.entries {
		f := kept.entry.states[0].factor
		for i, w := range c.targets {
			for d, sd := range []float64{w.sdU, w.sdV} {
				row := 2*i + d
				v := 0.0
				for k := range row + 1 {
					v += f[row*nt+k] * f[row*nt+k]
				}
				agree(t, i, "exact sd", math.Sqrt(v), sd, 2e-3)
			}
		}
	}
}

func agree(t *testing.T, i int, what string, got, want, within float64) {
	t.Helper()
	if !(math.Abs(got-want) <= within) {
		t.Errorf("target %d: %s is %.5f, want %.5f", i, what, got, want)
	}
}

func spread(draws []float64, target, nt int) float64 {
	var sum, squares float64
	for d := range Draws {
		v := draws[d*nt+target]
		sum, squares = sum+v, squares+v*v
	}
	mean := sum / Draws
	return math.Sqrt(squares/Draws - mean*mean)
}

// field is masts about a runway with the prior in force: n of them on a
// lattice, and points every 200 m along 9 km.
func field(n int) (masts []Mast, targets []Target) {
	for i := range n {
		row, column := i%4, i/4
		masts = append(masts, Mast{X: float64(column)*900 - 450*float64((n-1)/4), Y: float64(row)*700 - 1050 + 40*float64(i%3)})
	}
	for k := range 46 {
		targets = append(targets, Target{X: float64(k)*200 - 4500, Y: 100, East: 1})
	}
	return masts, targets
}

// gusty is a wind with turbulence of a fixed pattern, and an outflow from
// second 700 on.
func gusty(masts []Mast, k int) func(i int) (u, v float64) {
	tpl := template{x: 300, y: 200, radius: 900, shape: broad}
	return func(i int) (u, v float64) {
		a, b := math.Sincos(float64(k)*0.7 + float64(i)*2.1)
		c, d := math.Sincos(float64(k)*0.13 - float64(i))
		u, v = 6+0.8*a+0.5*c, 2+0.7*b+0.6*d
		if k > 700 {
			e, n := tpl.wind(masts[i].X, masts[i].Y)
			u, v = u+9*e, v+9*n
		}
		return u, v
	}
}

// run steps an estimator through 750 s of gusty wind and gives every number
// that came out.
func run(t testing.TB, masts []Mast, targets []Target, before func(e *Estimator)) []float64 {
	s := newSite(t, len(masts))
	e := New(masts, targets, s.layout, DefaultPrior())
	before(e)
	var out []float64
	for k := 1; k <= 750; k++ {
		s.report(k, gusty(masts, k))
		if k%10 != 0 {
			continue // every tenth second is enough, and crosses the half minutes
		}
		p := e.Step(s.recorder.Snapshot(epoch + sensors.Instant(k)*sensors.Second))
		if p == nil {
			out = append(out, math.Inf(-1))
			continue
		}
		out = append(append(append(out, p.Mean...), p.Draws...), p.OutflowShare)
	}
	return out
}

// The same snapshots give the same bits, whatever the cache held before.
func TestSameSnapshotsSameBits(t *testing.T) {
	masts, targets := field(8)
	first := run(t, masts, targets, func(*Estimator) {})
	if slices.ContainsFunc(first, math.IsNaN) {
		t.Fatal("a number came out that is none")
	}
	again := run(t, masts, targets, func(*Estimator) {})
	other := run(t, masts, targets, func(e *Estimator) {
		// Another wind first, at other times: it leaves gains in the cache, and
		// nothing in the memory that the run looks at.
		s := newSite(t, len(masts))
		for k := 1; k <= 100; k++ {
			s.report(k, func(i int) (u, v float64) { return 9 + float64(k%7+i), float64(k % 5) })
		}
		for k := 50; k <= 100; k += 7 {
			e.Step(s.recorder.Snapshot(epoch + sensors.Instant(k)*sensors.Second))
		}
		e.memory = newAmbientMemory(len(e.prior.Fields))
	})
	for name, got := range map[string][]float64{"a second run": again, "a run with gains left over": other} {
		if !slices.Equal(got, first) {
			t.Errorf("%s differs", name)
		}
	}
}

// An outflow over the masts is believed to be one, and calm air is not.
func TestOutflowShareFollowsTheWind(t *testing.T) {
	masts, targets := field(8)
	s := newSite(t, len(masts))
	e := New(masts, targets, s.layout, DefaultPrior())
	calm, storm := 0.0, 0.0
	for k := 1; k <= 750; k++ {
		s.report(k, gusty(masts, k))
		if k < 20 {
			continue
		}
		share := e.Step(s.recorder.Snapshot(epoch + sensors.Instant(k)*sensors.Second)).OutflowShare
		switch {
		case k > 400 && k <= 700:
			calm = max(calm, share)
		case k > 730:
			storm = max(storm, share)
		}
	}
	t.Logf("share in steady wind up to %.3f, in the outflow %.3f", calm, storm)
	if calm > 0.3 || storm < 0.8 {
		t.Errorf("in steady wind the share of outflows is up to %.2f, in an outflow of 9 m/s %.2f", calm, storm)
	}
}

// Without a live mast there is no posterior.
func TestNoMastNoPosterior(t *testing.T) {
	masts, targets := field(4)
	s := newSite(t, len(masts))
	e := New(masts, targets, s.layout, DefaultPrior())
	if p := e.Step(s.recorder.Snapshot(epoch)); p != nil {
		t.Errorf("masts that never reported give %+v", p)
	}
}

// warm is an estimator and a snapshot that it has seen before.
func warm(t testing.TB, stations int) (*Estimator, *averages.Snapshot) {
	masts, targets := field(stations)
	s := newSite(t, len(masts))
	for k := 1; k <= 750; k++ {
		s.report(k, gusty(masts, k))
	}
	e := New(masts, targets, s.layout, DefaultPrior())
	snapshot := s.recorder.Snapshot(epoch + 750*sensors.Second) // on the half minute: the memory is written too
	for range 2 {
		if e.Step(snapshot) == nil {
			t.Fatal("there is no posterior")
		}
	}
	return e, snapshot
}

// A step that finds its gains allocates nothing.
func TestWarmStepAllocatesNothing(t *testing.T) {
	e, snapshot := warm(t, 8)
	if got := testing.AllocsPerRun(20, func() { e.Step(snapshot) }); got != 0 {
		t.Errorf("a warm step allocates %g times", got)
	}
}

func benchmarkHit(b *testing.B, stations int) {
	e, snapshot := warm(b, stations)
	b.ReportAllocs()
	for b.Loop() {
		e.Step(snapshot)
	}
}

// The usual step: the gains are there.
func BenchmarkStepHit8(b *testing.B)  { benchmarkHit(b, 8) }
func BenchmarkStepHit40(b *testing.B) { benchmarkHit(b, 40) }

// A step whose gains must be computed: a mast came or went, or its turbulence
// changed by a step.
func BenchmarkStepMiss8(b *testing.B) {
	e, snapshot := warm(b, 8)
	b.ReportAllocs()
	for b.Loop() {
		e.cache = newCache(cacheSize)
		e.Step(snapshot)
	}
}
