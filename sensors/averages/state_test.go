package averages

import (
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"sockline/sensors"
)

// A mast is starting until two thirds of its window are full, live while it
// reports, then stale, then lost; and it must begin anew after that.
func TestStates(t *testing.T) {
	const window = 30 * time.Second
	r, add := feed(t, station(time.Second), window)
	stateAt := func(k int) State { return r.Snapshot(epoch + sensors.Instant(k)*sensors.Second).Mast(0).State }
	if got := stateAt(0); got != Never {
		t.Fatalf("a mast that never reported is %s", got)
	}
	report := func(k int) { add(epoch+sensors.Instant(k)*sensors.Second, 5+0.1*float64(k%7), 200+float64(k%5)) }
	for k := 1; k <= 40; k++ {
		report(k)
		want := Starting
		if k >= 20 { // two thirds of 30 s
			want = Live
		}
		if got := stateAt(k); got != want {
			t.Errorf("after %d s it is %s, want %s", k, got, want)
		}
	}
	// Silence. The newest third of the window (10 s) must itself be two thirds
	// full, but already after stale_after, 3 s, nothing is believed.
	tests := []struct {
		silent int
		want   State
	}{{1, Live}, {3, Live}, {4, Stale}, {60, Stale}, {61, Lost}, {3600, Lost}}
	for _, test := range tests {
		if got := stateAt(40 + test.silent); got != test.want {
			t.Errorf("after %d s of silence it is %s, want %s", test.silent, got, test.want)
		}
	}
	for k := 5000; k < 5040; k++ {
		report(k)
		want := Starting
		if k-5000+1 >= 20 {
			want = Live
		}
		if got := stateAt(k); got != want {
			t.Errorf("%d s after it came back it is %s, want %s", k-5000+1, got, want)
		}
	}
}

// Late is a mast that is not stale yet and whose newest reading is overdue, on
// its own scale, within a second.
func TestLate(t *testing.T) {
	for _, interval := range []time.Duration{200 * time.Millisecond, time.Second, 5 * time.Second} {
		st := station(interval)
		r, add := feed(t, st, 30*time.Second)
		last := epoch
		for k := 1; last < epoch+100*sensors.Second; k++ {
			last = epoch.Add(time.Duration(k) * interval)
			add(last, 5+0.1*float64(k%7), 200+float64(k%5))
		}
		for silent := sensors.Instant(0); silent <= 20*sensors.Second; silent += sensors.Second {
			m := r.Snapshot(last.CeilSecond() + silent).Mast(0)
			overdue := silent.Sub(0) > interval+time.Second
			if m.Late != (overdue && silent.Sub(0) <= st.StaleAfter) || (silent == 0 && m.State != Live) {
				t.Errorf("interval %v, silent for %d s: %s, late %v", interval, silent/sensors.Second, m.State, m.Late)
			}
		}
	}
}

// While somebody works on a mast it says so and serves no ground, whatever it
// sends; afterwards it begins anew.
func TestMaintenance(t *testing.T) {
	st := station(time.Second)
	at := func(k int) sensors.Instant { return epoch + sensors.Instant(k)*sensors.Second }
	st.Maintenance = []sensors.Maintenance{{From: at(100), To: at(160), Reason: "new bearings"}}
	r, add := feed(t, st, 30*time.Second)
	for k := 1; k <= 300; k++ {
		speed := 5 + 0.1*float64(k%7)
		if k >= 100 && k < 160 {
			speed += 20 // somebody spins it
		}
		add(at(k), speed, 200+float64(k%5))
		m := r.Snapshot(at(k)).Mast(0)
		want := Live
		switch {
		case k < 20:
			want = Starting
		case k >= 100 && k < 160:
			want = Maintenance
		case k >= 160 && k < 179:
			want = Starting
		}
		if m.State != want || m.Last != at(k) {
			t.Fatalf("after %d s it is %s, want %s; last heard of at %v", k, m.State, want, m.Last)
		}
	}
	if w, ok := r.Wind(0, at(300)); !ok || w.Ten.Max > 6 {
		t.Errorf("what was turned by hand is in the wind: %+v", w.Ten)
	}
}

// What is rejected leaves a gap, which is no calm.
func TestRejectedReadingsAreNoWind(t *testing.T) {
	r, add := feed(t, station(time.Second), 30*time.Second)
	for k := 1; k <= 100; k++ {
		speed := 6 + 0.1*float64(k%3)
		if k%4 == 0 {
			speed = 400 // out of range
		}
		add(epoch+sensors.Instant(k)*sensors.Second, speed, 180+float64(k%5))
	}
	m := r.Snapshot(epoch + 100*sensors.Second).Mast(0)
	if m.State != Live {
		t.Fatalf("with three of four readings it is %s", m.State)
	}
	for b, block := range m.Blocks {
		if speed := math.Hypot(block.East, block.North); !block.Present || math.Abs(speed-6.1) > 0.2 {
			t.Errorf("block %d: %g m/s, present %v; every good reading is near 6.1", b, speed, block.Present)
		}
	}
}

// A mast that reports every 5 s is live on its own scale.
func TestSlowMast(t *testing.T) {
	r, add := feed(t, station(5*time.Second), 30*time.Second)
	for k := 5; k <= 600; k += 5 {
		add(epoch+sensors.Instant(k)*sensors.Second, 6+0.1*float64(k%7), 180+float64(k%11))
		for j := k; j < k+5; j++ {
			m := r.Snapshot(epoch + sensors.Instant(j)*sensors.Second).Mast(0)
			if k > 60 && m.State != Live {
				t.Fatalf("%d s: it reports every 5 s and is %s", j, m.State)
			}
		}
	}
	if w, ok := r.Wind(0, epoch+600*sensors.Second); !ok || math.Abs(w.Two.Speed-6.3) > 0.1 || math.Abs(w.Ten.Gust-6.6) > 1e-9 {
		t.Errorf("two-minute wind %+v, %v; want a mean of 6.3 and the greatest report, 6.6", w, ok)
	}
}

// autoregressive is a first-order process in steps of 1 s: variance s2, time T.
func autoregressive(rng *rand.Rand, s2, time float64) func() float64 {
	phi := math.Exp(-1 / time)
	x := rng.NormFloat64() * math.Sqrt(s2)
	return func() float64 {
		x = phi*x + math.Sqrt(s2*(1-phi*phi))*rng.NormFloat64()
		return x
	}
}

// The variance of a mean of w seconds, by formula, is that of simulated means.
func TestMeanVariance(t *testing.T) {
	rng := rand.New(rand.NewPCG(11, 12))
	for _, test := range []struct{ variance, time, w float64 }{{1, 5, 10}, {4, 10, 30}, {2, 3, 60}} {
		const trials = 4000
		sum := 0.0
		for range trials {
			// Ten steps a second, so that the sum is near the integral that the
			// formula is of.
			next := autoregressive(rng, test.variance, test.time*10)
			mean := 0.0
			for range int(test.w) * 10 {
				mean += next() / (test.w * 10)
			}
			sum += mean * mean
		}
		got := Turbulence{Variance: test.variance, Time: test.time}.MeanVariance(test.w)
		// 4000 squares of a normal have a standard error of 2.2 % of their mean.
		if ratio := got / (sum / trials); ratio < 0.92 || ratio > 1.08 {
			t.Errorf("variance %g, time %g s, over %g s: the formula gives %.4f, simulated means %.4f", test.variance, test.time, test.w, got, sum/trials)
		}
	}
}

// The turbulence is found again in a simulated wind, and rests on what came
// before the blocks in use: an onset in them changes nothing.
func TestTurbulenceEstimate(t *testing.T) {
	const window = 30 * time.Second
	for _, test := range []struct{ variance, time float64 }{{1, 4}, {2.5, 8}} {
		var variance, spread float64
		const runs = 12
		for run := range uint64(runs) {
			rng := rand.New(rand.NewPCG(21, run))
			r, add := feed(t, station(time.Second), window)
			u, v := autoregressive(rng, test.variance, test.time), autoregressive(rng, test.variance, test.time)
			wind := func(k int, jump float64) {
				east, north := 8+jump+u(), v()
				add(epoch+sensors.Instant(k)*sensors.Second, math.Hypot(east, north), direction(east, north))
			}
			k := 1
			for ; k <= 900; k++ {
				wind(k, 0)
			}
			calm := r.Snapshot(epoch + 900*sensors.Second).Mast(0).Turbulence
			for ; k <= 960; k++ { // the blocks of this window reach back 90 s
				wind(k, 12)
			}
			onset := r.Snapshot(epoch + 960*sensors.Second).Mast(0).Turbulence
			if onset.Variance > 2.5*calm.Variance+0.2 {
				t.Errorf("run %d: an onset of 12 m/s raises the variance from %.2f to %.2f", run, calm.Variance, onset.Variance)
			}
			// What the filter needs is the variance of the mean.
			variance += calm.MeanVariance(10) / runs
			spread = max(spread, math.Abs(calm.MeanVariance(10)))
		}
		want := Turbulence{Variance: test.variance, Time: test.time}.MeanVariance(10)
		if ratio := variance / want; ratio < 0.75 || ratio > 1.3 {
			t.Errorf("variance %g, time %g s: the variance of a 10 s mean is found as %.3f, true %.3f", test.variance, test.time, variance, want)
		}
		if spread > 3*want {
			t.Errorf("one run finds %.3f, true is %.3f", spread, want)
		}
	}
}

// An instrument that reports every two or five seconds finds the same turbulence:
// neighbouring readings of it are still alike, and that must not pass for calm.
func TestTurbulenceOfSeldomReports(t *testing.T) {
	const variance, speed, runs = 2.0, 8.0, 12
	want := Turbulence{Variance: variance, Time: ExpectedTime(speed)}
	for _, interval := range []int{2, 5} {
		found := 0.0
		for run := range uint64(runs) {
			rng := rand.New(rand.NewPCG(22, run))
			r, add := feed(t, station(time.Duration(interval)*time.Second), 30*time.Second)
			u, v := autoregressive(rng, variance, want.Time), autoregressive(rng, variance, want.Time)
			for k := 1; k <= 900; k++ {
				east, north := speed+u(), v()
				if k%interval == 0 {
					add(epoch+sensors.Instant(k)*sensors.Second, math.Hypot(east, north), direction(east, north))
				}
			}
			found += r.Snapshot(epoch+900*sensors.Second).Mast(0).Turbulence.Variance / runs
		}
		if ratio := found / variance; ratio < 0.85 || ratio > 1.15 {
			t.Errorf("every %d s: variance %.2f, true %.2f", interval, found, variance)
		}
	}
}

func direction(east, north float64) float64 {
	d := math.Atan2(-east, -north) * 180 / math.Pi
	if d < 0 {
		d += 360
	}
	return d
}

// What is known at a step depends on the bins alone, and costs no memory.
func TestSnapshotAllocatesNothing(t *testing.T) {
	r, add := feed(t, station(time.Second), 30*time.Second)
	k := 1
	for ; k <= 900; k++ {
		add(epoch+sensors.Instant(k)*sensors.Second, 5+0.1*float64(k%7), 200+float64(k%5))
	}
	if got := testing.AllocsPerRun(120, func() {
		add(epoch+sensors.Instant(k)*sensors.Second, 5+0.1*float64(k%7), 200+float64(k%5))
		r.Snapshot(epoch + sensors.Instant(k)*sensors.Second)
		k++
	}); got != 0 {
		t.Errorf("a step allocates %g times", got)
	}
}

// The layout of a window.
func TestLayout(t *testing.T) {
	tests := []struct {
		window time.Duration
		want   [Blocks]int
	}{{30 * time.Second, [Blocks]int{10, 20, 60}}, {20 * time.Second, [Blocks]int{6, 14, 40}}, {time.Second, [Blocks]int{2, 4, 12}}}
	for _, test := range tests {
		l := NewLayout(test.window)
		if l.Seconds != test.want {
			t.Errorf("a window of %v has blocks of %v s, want %v", test.window, l.Seconds, test.want)
		}
		if want := float64(test.want[0]) + float64(test.want[1])/2; l.Age(1) != want || l.Total() != test.want[0]+test.want[1]+test.want[2] {
			t.Errorf("a window of %v: age %g, total %d", test.window, l.Age(1), l.Total())
		}
	}
}
