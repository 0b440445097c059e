package drift

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// midnight is a UTC day.
const midnight = sensors.Instant(1_782_864_000_000)

// fault is what is wrong with the first mast.
type fault struct {
	turned float64 // degrees clockwise
	ratio  float64 // of its speed; 0 is 1
}

// day plays so many hours of ten-minute means of eight masts, drawn directly:
// what a mean of 600 one-second samples keeps is known, so they need not be
// drawn. It keeps of the turbulence (sigma = 0.14 (0.75 U + 5.6), memory 57 m /
// U; IEC 61400-1, from memory) the part of MeanVariance in package averages,
// and of eddies of the given strength and a time of 300 s the share 0.57; both
// differ from mast to mast, which is so where the masts stand farther apart
// than the eddies are long. The network's wind wanders by 3 degrees an hour.
func day(w *Watch, rng *rand.Rand, hours int, speed, eddies float64, f fault, see ...func()) {
	sigma := 0.14 * (0.75*speed + 5.6)
	a := 600 * speed / 57
	turbulence := sigma * math.Sqrt(2/a*(1-(1-math.Exp(-a))/a))
	memory := math.Exp(-600.0 / 300)
	own := make([]quantity.Vector, len(w.masts))
	next := func(x float64) float64 { return memory*x + math.Sqrt(1-memory*memory)*rng.NormFloat64() }
	from := 360 * rng.Float64()
	means := make([]Mean, len(w.masts))
	for block := range hours * 6 {
		from += 3 / math.Sqrt(6) * rng.NormFloat64()
		for i := range means {
			own[i] = quantity.Vector{East: next(own[i].East), North: next(own[i].North)}
			v := quantity.FromDirection(speed, from)
			v.East += 0.754*eddies*own[i].East + turbulence*rng.NormFloat64()
			v.North += 0.754*eddies*own[i].North + turbulence*rng.NormFloat64()
			if i == 0 {
				ratio := f.ratio
				if ratio == 0 {
					ratio = 1
				}
				v = quantity.FromDirection(ratio*v.Speed(), v.From()+f.turned)
			}
			means[i] = Mean{Present: true, Vector: v, Speed: 1.02 * v.Speed()}
		}
		w.Take(means)
		if block%6 == 5 {
			w.Turn(midnight + sensors.Instant(block/6+1)*3600*sensors.Second)
			for _, f := range see {
				f()
			}
		}
	}
}

func ids(n int) []string { return strings.Split("abcdefghijkl", "")[:n] }

// A mast that is turned by 15 degrees or reads 10 % low is named within a day
// of ordinary wind, with an interval that holds the error; the others are not.
func TestNamedWithinADay(t *testing.T) {
	const days = 100
	for _, test := range []struct {
		name  string
		fault fault
		named func(Finding) bool
	}{
		{"turned by 15 degrees", fault{turned: 15}, func(f Finding) bool { return f.Misaligned && !f.Low && !f.High }},
		{"turned by -15 degrees", fault{turned: -15}, func(f Finding) bool { return f.Misaligned && !f.Low && !f.High }},
		{"10 % low", fault{ratio: 0.9}, func(f Finding) bool { return f.Low && !f.Misaligned }},
		{"10 % high", fault{ratio: 1.1}, func(f Finding) bool { return f.High && !f.Misaligned }},
	} {
		rng := rand.New(rand.NewPCG(11, 13))
		named, held, others := 0, 0, 0
		ratio := test.fault.ratio
		if ratio == 0 {
			ratio = 1
		}
		for range days {
			w := New(ids(8))
			day(w, rng, 24, 5, 0.5, test.fault)
			f := w.Finding(0)
			if test.named(f) {
				named++
			}
			if f.TurnedLow <= test.fault.turned && test.fault.turned <= f.TurnedHigh && f.RatioLow <= ratio && ratio <= f.RatioHigh {
				held++
			}
			for i := 1; i < 8; i++ {
				if w.Finding(i).Named() {
					others++
				}
			}
		}
		// Both intervals hold in 0.95^2 = 0.90 of the days.
		if named < days*95/100 || held < days*80/100 || others > 0 {
			t.Errorf("%s: named in %d of %d days, held by both intervals in %d; %d others were named", test.name, named, days, held, others)
		}
	}
}

// power is how often an error of the first mast is named after 24 h.
func power(rng *rand.Rand, days int, speed, eddies float64, f fault) float64 {
	named := 0
	for range days {
		w := New(ids(8))
		day(w, rng, 24, speed, eddies, f)
		if w.Finding(0).Named() {
			named++
		}
	}
	return float64(named) / float64(days)
}

// The smallest errors that are named in 19 of 20 days at 5 m/s, and how often
// a sound mast is named in a year.
func TestPower(t *testing.T) {
	if racing {
		t.Skip("one goroutine, and the check runs it without the race detector")
	}
	rng := rand.New(rand.NewPCG(17, 19))
	const days = 60
	smallest := func(eddies float64, f func(float64) fault, steps []float64) float64 {
		for _, s := range steps {
			if power(rng, days, 5, eddies, f(s)) >= 0.95 {
				return s
			}
		}
		return math.Inf(1)
	}
	turns := []float64{6, 7, 8, 9, 10, 11, 12, 13, 14, 15}
	lows := []float64{6, 7, 8, 9, 10, 11, 12, 13, 14, 15}
	for _, eddies := range []float64{0.3, 0.5, 1.0} {
		turned := smallest(eddies, func(d float64) fault { return fault{turned: d} }, turns)
		low := smallest(eddies, func(p float64) fault { return fault{ratio: 1 - p/100} }, lows)
		t.Logf("eddies of %.1f m/s: %g degrees and %g %% low are named in 95 %% of the days", eddies, turned, low)
		if eddies <= 0.5 && (turned > 9 || low > 10) {
			t.Errorf("eddies of %.1f m/s: %g degrees, %g %% are the smallest errors found", eddies, turned, low)
		}
	}
	named, hours := 0, 0
	for range 40 {
		w := New(ids(8))
		day(w, rng, 24*6, 5, 0.5, fault{}, func() {
			for i := range 8 {
				hours++
				if w.Finding(i).Named() {
					named++
				}
			}
		})
	}
	t.Logf("in %.1f mast-years, looked at every hour, a sound mast is named in %d hours", float64(hours)/24/365, named)
	if named > 0 {
		t.Errorf("a sound mast is named in %d hours", named)
	}
}

// Nothing is learnt of light air, of a wind that differs from mast to mast, of
// a mast that does not report, or with too few neighbours.
func TestNothingIsLearntOf(t *testing.T) {
	even := func(n int, speed float64) []Mean {
		means := make([]Mean, n)
		for i := range means {
			means[i] = Mean{Present: true, Vector: quantity.FromDirection(speed, 240), Speed: speed}
		}
		return means
	}
	scattered := even(8, 6)
	for i := range scattered {
		scattered[i].Vector = quantity.FromDirection(6, float64(45*i))
	}
	absent := even(8, 6)
	absent[0].Present = false
	for _, test := range []struct {
		name  string
		means []Mean
		known bool
	}{
		{"an even wind", even(8, 6), true}, {"light air", even(8, 2.5), false}, {"three masts", even(3, 6), false},
		{"four masts", even(4, 6), true}, {"a wind from everywhere", scattered, false}, {"no report", absent, false},
	} {
		w := New(ids(len(test.means)))
		for h := 1; h <= 24; h++ {
			for range 6 {
				w.Take(test.means)
			}
			w.Turn(midnight + sensors.Instant(h)*3600*sensors.Second)
		}
		if f := w.Finding(0); f.Known != test.known || f.Named() {
			t.Errorf("%s: %+v", test.name, f)
		}
	}
}

// A mast that stands still while the others blow is named after two blocks,
// and not in a calm; it is free again as soon as it turns.
func TestBlocked(t *testing.T) {
	means := func(others, own float64) []Mean {
		m := make([]Mean, 5)
		for i := range m {
			m[i] = Mean{Present: true, Vector: quantity.FromDirection(others, 100), Speed: others}
		}
		m[0] = Mean{Present: true, Vector: quantity.FromDirection(own, 30), Speed: own}
		return m
	}
	w := New(ids(5))
	for i, step := range []struct {
		others, own float64
		want        bool
	}{{6, 0, false}, {6, 0.1, true}, {6, 0, true}, {6, 5, false}, {1, 0, false}, {1, 0, false}, {6, 0, false}, {3.9, 0, false}, {6, 0, false}, {6, 0, true}} {
		w.Take(means(step.others, step.own))
		if got := w.Finding(0); got.Blocked != step.want || got.Named() != step.want || w.Finding(1).Blocked {
			t.Errorf("block %d: %+v", i, got)
		}
	}
}

// What is found after a start that loads the tables is what would have been
// found without one, and a table that makes no sense is refused.
func TestTablesTakeARunOn(t *testing.T) {
	at := func(h int) sensors.Instant { return midnight + sensors.Instant(h)*3600*sensors.Second }
	var tables [][]byte
	whole := New(ids(8))
	rng := rand.New(rand.NewPCG(23, 29))
	for h := 1; h <= 20; h++ {
		part := New(ids(8))
		day(part, rng, 1, 6, 0.5, fault{turned: 12}) // any hour of it will do
		for i := range whole.masts {
			if len(part.masts[i].hours) == 1 {
				learnt := part.masts[i].hours[0]
				learnt.end = at(h)
				whole.masts[i].learn(learnt)
			}
		}
		whole.Turn(at(h))
		tables = append(tables, whole.Table(at(h)))
	}
	again := New(ids(8))
	for _, table := range tables {
		if err := again.Load(table); err != nil {
			t.Fatal(err)
		}
	}
	again.Loaded(at(20))
	for i := range 8 {
		if again.Finding(i) != whole.Finding(i) || !again.Finding(i).Known {
			t.Errorf("mast %d: %+v, want %+v", i, again.Finding(i), whole.Finding(i))
		}
	}
	if !again.Finding(0).Misaligned {
		t.Errorf("%+v", again.Finding(0))
	}
	// Three windless days later nothing is left of it.
	again.Turn(at(20).Add(72 * time.Hour))
	if f := again.Finding(0); f.Hours != 0 || f.Known {
		t.Errorf("%+v", f)
	}
	for _, bad := range []string{"", `{"masts":{"a":{"blocks":7}}}`, `{"masts":{"a":{"blocks":4,"turned_deg":999}}}`, `{"masts":{"a":{"blocks":4,"log_ratio":-40}}}`} {
		if err := again.Load([]byte(bad)); err == nil {
			t.Errorf("%s is accepted", bad)
		}
	}
}
