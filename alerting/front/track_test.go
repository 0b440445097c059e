package front_test

import (
	"math"
	"reflect"
	"testing"
	"time"

	"sockline/alerting/front"
	"sockline/sensors"
	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
)

// weather is a scene over the rig's masts without eddies.
func weather(speed, from float64, seed uint64, minutes int) *synthetic.Scene {
	return &synthetic.Scene{
		Name: "test", Start: 1782907200 * sensors.Second, Length: time.Duration(minutes) * time.Minute, Seed: seed,
		From: from, Speed: speed, Masts: synthetic.DefaultInstrument(), Turbulence: synthetic.TurbulenceB,
	}
}

// A front of 8.6 m/s (the mean of Mahoney 1988) that comes along the runway: it
// is told before it reaches the touchdown masts, with its speed, heading and
// the change behind it.
func TestFrontAlongTheRunway(t *testing.T) {
	r := newRig(t, "skerrymoor")
	s := weather(3, 70, 5, 20)
	lead := r.cfg.Airfield.Paths[0]
	x, y := lead.At(0)
	s.Fronts = []synthetic.Front{{
		X: x, Y: y, Passes: 600, Toward: lead.BearingTrue(), Speed: 8.6, Width: 120,
		Step: quantity.FromDirection(13, lead.BearingTrue()+180),
	}}
	toldAt, last := 0, front.Front{}
	r.play(t, s, func(second int, fronts []front.Front) {
		if len(fronts) > 1 {
			t.Fatalf("%d fronts at %d s", len(fronts), second)
		}
		if len(fronts) == 0 {
			return
		}
		f := &fronts[0]
		if toldAt == 0 {
			toldAt = second
		}
		if second == 540 { // a minute before the threshold of 07
			a := f.Arrivals[0]
			if a.Place != "threshold 07" || a.Arrived || math.Abs(a.At.Sub(s.Start).Seconds()-600) > 20 {
				t.Errorf("a minute ahead the arrival is told as %+v", a)
			}
			if !f.Between(x-1500, y-1500, x, y) || f.Between(x+1000, y+1000, x+3000, y+3000) {
				t.Errorf("the line lies at %.0f %.0f, band %.0f m", f.X, f.Y, f.Band)
			}
		}
		last = *f
		last.Hit = append([]int(nil), f.Hit...)
		last.Arrivals = append([]front.Arrival(nil), f.Arrivals...)
	})
	if toldAt == 0 || toldAt > 480 {
		t.Errorf("told first at %d s; it passes the second mast at 370 s", toldAt)
	}
	if last.Kind != front.GustFront || len(last.Hit) < 8 || last.Aligned {
		t.Errorf("at the end: %+v", last)
	}
	if math.Abs(last.Speed-8.6) > 0.8 || last.SpeedLow > 8.6 || last.SpeedHigh < 8.6 {
		t.Errorf("speed %.1f (%.1f to %.1f) m/s", last.Speed, last.SpeedLow, last.SpeedHigh)
	}
	if d := math.Remainder(last.Toward-lead.BearingTrue(), 360); math.Abs(d) > 5 {
		t.Errorf("heading off by %.1f degrees", d)
	}
	if math.Abs(last.Change.Speed()-13) > 1.5 {
		t.Errorf("change %.1f m/s", last.Change.Speed())
	}
	if math.Abs(math.Abs(last.Turn)-180) > 25 {
		t.Errorf("turn %.0f degrees from %03.0f to %03.0f", last.Turn, last.Before.From(), last.After.From())
	}
	checked := 0
	for _, a := range last.Arrivals {
		if a.Mast >= 0 && a.Predicted != 0 {
			checked++
			if off := a.Predicted.Sub(a.At).Seconds(); math.Abs(off) > 60 {
				t.Errorf("%s was predicted %.0f s off", a.Place, off)
			}
		}
	}
	if checked < 4 {
		t.Errorf("only %d predictions were checked against what the masts saw", checked)
	}
}

// The change that spreads from an outflow is no front: over the life of one
// over the runway no line is told.
func TestOutflowIsNoFront(t *testing.T) {
	r := newRig(t, "skerrymoor")
	told := 0
	for seed := range uint64(3) {
		r.reset()
		s := weather(4, 240, 40+seed, 18)
		x, y := r.cfg.Airfield.Paths[0].At(1200)
		s.Outflows = []synthetic.Outflow{{
			Model: synthetic.ModelOsegueraBowles, Strength: 13, Radius: 1000, Stretch: 1, X: x, Y: y,
			History: synthetic.History{Starts: 300, Grows: 180, Holds: 180, Fades: 180}, Spread: 1,
		}}
		r.play(t, s, func(second int, fronts []front.Front) {
			for i := range fronts {
				if fronts[i].Moving && len(fronts[i].Hit) > 3 {
					told++
				}
			}
		})
	}
	if told > 0 {
		t.Errorf("a line with more than three masts is told for %d s", told)
	}
}

// A slow veer of 70 degrees in 12 minutes: a wind shift without a line.
func TestSlowVeer(t *testing.T) {
	r := newRig(t, "skerrymoor")
	s := weather(8, 200, 24, 24)
	s.Veers = []synthetic.Veer{{By: 70, Starts: 300, Takes: 720}}
	first, greatest := 0, 0.0
	r.play(t, s, func(second int, fronts []front.Front) {
		for i := range fronts {
			f := &fronts[i]
			if f.Kind != front.WindShift || f.Moving {
				t.Fatalf("at %d s: %+v", second, *f)
			}
			if first == 0 {
				first = second
			}
			greatest = max(greatest, f.Turn)
		}
	})
	// It has turned by 30 degrees 309 s after its begin; the mean takes a minute.
	if first < 300+309 || first > 300+309+150 {
		t.Errorf("told first at %d s", first)
	}
	if math.Abs(greatest-70) > 8 {
		t.Errorf("the greatest turn told is %.0f degrees", greatest)
	}
}

// The same readings give the same fronts to the bit, and what came more than
// two hours before does not matter.
func TestSameFronts(t *testing.T) {
	r := newRig(t, "skerrymoor")
	s := synthetic.DrawEpisode(11, synthetic.EpisodeFront, r.line())
	run := func() (all []front.Front) {
		r.reset()
		r.play(t, s, func(_ int, fronts []front.Front) {
			for _, f := range fronts {
				f.Hit, f.Arrivals = append([]int(nil), f.Hit...), append([]front.Arrival(nil), f.Arrivals...)
				all = append(all, f)
			}
		})
		return all
	}
	a, b := run(), run()
	if len(a) == 0 || !reflect.DeepEqual(a, b) {
		t.Errorf("%d and %d fronts", len(a), len(b))
	}
}

func TestTurned(t *testing.T) {
	for _, c := range []struct{ before, after, speed, want float64 }{
		{350, 20, 8, 30}, {20, 350, 8, -30}, {90, 270, 8, -180}, {200, 270, 8, 70}, {200, 270, 1, 0},
	} {
		got := front.Turned(quantity.FromDirection(c.speed, c.before), quantity.FromDirection(8, c.after))
		if math.Abs(got-c.want) > 1e-9 {
			t.Errorf("from %g to %g: %g, want %g", c.before, c.after, got, c.want)
		}
	}
}

// A step of a warm tracker allocates nothing, with a front over the masts.
func TestWarmStepAllocatesNothing(t *testing.T) {
	r := newRig(t, "skerrymoor")
	s := synthetic.DrawEpisode(11, synthetic.EpisodeFront, r.line())
	s.Length = 900 * time.Second
	r.play(t, s, func(int, []front.Front) {})
	// 900 s is a tick: everything is weighed again.
	snapshot := r.record.Snapshot(s.Start + 900*sensors.Second)
	if fronts := r.tracker.Step(snapshot); len(fronts) == 0 {
		t.Fatal("no front is over the masts")
	}
	if n := testing.AllocsPerRun(20, func() { r.tracker.Step(snapshot) }); n > 0 {
		t.Errorf("%.0f allocations a step", n)
	}
}

// A step with a front over the masts on a tick, the dearest there is, and one
// between two ticks.
func BenchmarkStep(b *testing.B) {
	r := newRig(b, "skerrymoor")
	s := synthetic.DrawEpisode(11, synthetic.EpisodeFront, r.line())
	s.Length = 900 * time.Second
	r.play(b, s, func(int, []front.Front) {})
	for _, c := range []struct {
		name   string
		second sensors.Instant
	}{{"tick", 900}, {"between", 901}} {
		b.Run(c.name, func(b *testing.B) {
			snapshot := r.record.Snapshot(s.Start + c.second*sensors.Second)
			for b.Loop() {
				r.tracker.Step(snapshot)
			}
		})
	}
}
