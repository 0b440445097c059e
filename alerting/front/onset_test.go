package front

import (
	"math"
	"math/rand/v2"
	"testing"

	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quantity"
)

// epoch is some time, a whole tick.
const epoch sensors.Instant = 1782907200 * sensors.Second

// ticks of six seconds, given as deviations in one direction: what the test sees
// of a mast.
func deviations(k float64, xs ...float64) (*watch, clockwork, sensors.Instant) {
	c := clockwork{w: 6, width: 6 * sensors.Second}
	w := &watch{}
	t := epoch
	for i, x := range xs {
		t = epoch + sensors.Instant(i+1)*c.width
		w.ticks[c.slot(t)] = tick{at: t, have: true, based: true, dx: x, k: k, sd: 1}
	}
	return w, c, t
}

// Page's test, worked by hand: with k = 0.5 the sums of .2 -.5 .1 1.8 1.2 2.1
// 1.6 .9 run 0 0 0 1.3 2.0 3.6 4.7 5.1: an alarm at the eighth with h = 5, and the
// onset is the fourth, after the last zero.
func TestPage(t *testing.T) {
	xs := []float64{.2, -.5, .1, 1.8, 1.2, 2.1, 1.6, .9}
	for n := 1; n <= len(xs); n++ {
		w, c, at := deviations(0.5, xs[:n]...)
		began, alarm := w.test(c, at)
		if alarm != (n == 8) {
			t.Errorf("after %d samples the alarm is %v", n, alarm)
		}
		if alarm && n-began != 4 {
			t.Errorf("the onset is sample %d, want 4", n-began)
		}
	}
	// A gap ends the sum: what is on its other side is not known to belong to it.
	w, c, at := deviations(0.5, xs...)
	w.ticks[c.slot(epoch+5*c.width)].have = false
	if _, alarm := w.test(c, at); alarm {
		t.Error("a sum goes on over a gap")
	}
}

// siegmund is the average run length of a one-sided test (D. Siegmund,
// Sequential Analysis, 1985): (e^(-2Db) + 2Db - 1)/(2 D2), D = shift - k, b = h +
// 1.166; known values are 938 (k 0.5, h 5, no shift) and 10.34 (shift 1).
func siegmund(shift, k, h float64) float64 {
	d, b := shift-k, h+1.166
	return (math.Exp(-2*d*b) + 2*d*b - 1) / (2 * d * d)
}

// The run lengths against Siegmund's formula, on independent samples, for one
// direction.
func TestRunLengths(t *testing.T) {
	near(t, "formula without a shift", siegmund(0, 0.5, 5), 938, 1)
	near(t, "formula with a shift", siegmund(1, 0.5, 5), 10.34, 0.01)
	rng := rand.New(rand.NewPCG(11, 12))
	run := func(shift float64) float64 {
		const runs = 400
		n := 0
		for range runs {
			s := 0.0
			for {
				n++
				if s = max(0, s+shift+rng.NormFloat64()-cusumLeastK); s > cusumH {
					break
				}
			}
		}
		return float64(n) / runs
	}
	// The standard error of the mean of 400 run lengths is 5 %.
	near(t, "without a shift", run(0), 938, 0.16*938)
	near(t, "with a shift of 1", run(1), 10.34, 0.6)
}

// How often chance sets a mast off, in autocorrelated air, in all directions
// together. The air is a first-order process with the deviation and the time of
// IEC 61400-1 class B (from memory), sampled once a second as the masts do.
func TestChanceAlarms(t *testing.T) {
	const hours = 60.0
	for _, c := range []struct{ speed, most float64 }{{3, 0.1}, {10, 0.25}, {15, 0.5}} { // alarms an hour
		air := averages.Turbulence{Variance: math.Pow(0.14*(0.75*c.speed+5.6), 2), Time: averages.ExpectedTime(c.speed), Speed: c.speed, Seconds: 600}
		rng := rand.New(rand.NewPCG(21, uint64(c.speed)))
		clock := clockwork{w: 6, width: 6 * sensors.Second}
		w := &watch{}
		rho, fresh := math.Exp(-1/air.Time), math.Sqrt(1-math.Exp(-2/air.Time))
		var u, v float64
		alarms, k := 0, 0.0
		m := averages.Mast{State: averages.Live, Turbulence: air}
		steps := int(hours * 600)
		for i := range steps {
			var mean quantity.Vector
			for range 6 {
				u, v = rho*u+fresh*rng.NormFloat64(), rho*v+fresh*rng.NormFloat64()
				mean.East += math.Sqrt(air.Variance) * u / 6
				mean.North += 0.8 * math.Sqrt(air.Variance) * v / 6
			}
			at := epoch + sensors.Instant(i+1)*clock.width
			m.Blocks[0] = averages.Block{East: c.speed + mean.East, North: mean.North, Present: true}
			w.take(clock, at, &m)
			k = w.ticks[clock.slot(at)].k
			if _, alarm := w.test(clock, at); alarm {
				alarms++
				w.over = at
			}
		}
		rate := float64(alarms) / hours
		t.Logf("%g m/s: k %.2f, %d alarms in %.0f h", c.speed, k, alarms, hours)
		if rate > c.most {
			t.Errorf("at %g m/s chance sets a mast off %.2f times an hour, more than %g", c.speed, rate, c.most)
		}
	}
}

// A ramp in turbulent air is found where its middle is, with an error that its
// standard error tells.
func TestSettle(t *testing.T) {
	rng := rand.New(rand.NewPCG(31, 32))
	c := clockwork{w: 6, width: 6 * sensors.Second}
	var squares float64
	runs := 200
	for range runs {
		w := &watch{}
		middle := 600 + 6*rng.Float64()
		t0 := epoch
		for i := range 115 {
			at := epoch + sensors.Instant(i+1)*c.width
			s := min(max((at.Sub(t0).Seconds()-3-middle)/40+0.5, 0), 1)
			w.ticks[c.slot(at)] = tick{at: at, have: true, v: quantity.Vector{East: 3 + 9*s + rng.NormFloat64(), North: 2 + rng.NormFloat64()}}
		}
		o := onset{alarm: epoch + 612*sensors.Second, noise: 1}
		var f fitter
		f.settle(w, c, epoch+115*c.width, &o, -60, 40)
		z := (o.from(t0) - middle) / o.sd
		squares += z * z
		if change := o.change(); math.Abs(change.Speed()-9) > 2.5 {
			t.Fatalf("change %.1f m/s", change.Speed())
		}
	}
	if spread := math.Sqrt(squares / float64(runs)); spread < 0.3 || spread > 1.5 {
		t.Errorf("errors are %.2f of their standard error", spread)
	}
}
