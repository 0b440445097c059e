package averages

import (
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"sockline/sensors"
	"sockline/sensors/quality"
	"sockline/sensors/quantity"
)

// air is the wind at one mast: a mean with the turbulence of the surface layer,
// class B of IEC 61400-1 (from memory), as autoregressive processes along and
// across it, and what comes on top. Speeds in m/s, seconds of 1 s.
type air struct {
	rng           *rand.Rand
	mean          quantity.Vector
	along, across float64
}

func (a *air) next(on quantity.Vector) quantity.Vector {
	m := quantity.Vector{East: a.mean.East + on.East, North: a.mean.North + on.North}
	speed := m.Speed()
	rho := math.Exp(-max(speed, 1) / 56.7)
	fresh := math.Sqrt(1 - rho*rho)
	sigma := 0.14 * (0.75*speed + 5.6)
	a.along = rho*a.along + fresh*sigma*a.rng.NormFloat64()
	a.across = rho*a.across + fresh*0.8*sigma*a.rng.NormFloat64()
	e, n := m.East/max(speed, 0.1), m.North/max(speed, 0.1)
	return quantity.Vector{East: m.East + a.along*e - a.across*n, North: m.North + a.along*n + a.across*e}
}

// strokes plays seconds of air to a mast with an instrument and gives the strokes
// that were seen, each at the second it was first told.
func strokes(t *testing.T, seed uint64, mean quantity.Vector, seconds int, on func(k int) quantity.Vector,
	instrument func(k int, v quantity.Vector) quantity.Vector) (seen []Stroke, told []int) {
	t.Helper()
	st := station(time.Second)
	r, c := NewRecorder([]sensors.Station{st}, NewLayout(30*time.Second)), quality.NewChecker(st)
	a := air{rng: rand.New(rand.NewPCG(seed, 7)), mean: mean}
	last := sensors.Instant(0)
	for k := 1; k <= seconds; k++ {
		v := instrument(k, a.next(on(k)))
		at := epoch + sensors.Instant(k)*sensors.Second
		r.Add(c.Check(sensors.Reading{Time: at, Arrival: at, Speed: math.Round(10*v.Speed()) / 10, From: math.Mod(math.Round(v.From()), 360)}))
		if s := r.Snapshot(at).Mast(0).Stroke; s.At != last {
			last = s.At
			seen, told = append(seen, s), append(told, k)
		}
	}
	return seen, told
}

func still(int) quantity.Vector                      { return quantity.Vector{} }
func sound(_ int, v quantity.Vector) quantity.Vector { return v }

func rotated(v quantity.Vector, radians float64) quantity.Vector {
	sin, cos := math.Sincos(radians)
	return quantity.Vector{East: v.East*cos - v.North*sin, North: v.East*sin + v.North*cos}
}

// An instrument that turns by 40 to 90 degrees from one second to the next is seen
// strokeAfter seconds later, with about what it did. One that loses 40 to 70 % of its
// speed is seen more often than not: gusts do the half of that.
func TestStrokes(t *testing.T) {
	const at, tries = 400, 60
	for kind, least := range map[string]int{"turned": tries * 9 / 10, "slowed": tries / 2} {
		rng := rand.New(rand.NewPCG(3, 9))
		found, off := 0, 0.0
		for i := range tries {
			mean := quantity.FromDirection(7+8*rng.Float64(), 360*rng.Float64())
			want := Stroke{Turn: (40 + 50*rng.Float64()) * math.Pi / 180 * float64(1-2*rng.IntN(2)), Ratio: 1}
			if kind == "slowed" {
				want = Stroke{Ratio: 0.3 + 0.3*rng.Float64()}
			}
			seen, told := strokes(t, uint64(i), mean, at+60, still, func(k int, v quantity.Vector) quantity.Vector {
				if k > at {
					v = rotated(quantity.Vector{East: v.East * want.Ratio, North: v.North * want.Ratio}, want.Turn)
				}
				return v
			})
			for n, s := range seen {
				if k := told[n] - at; k >= strokeAfter-1 && k <= strokeAfter+1 {
					found++
					off += math.Hypot(math.Remainder(s.Turn-want.Turn, 2*math.Pi), math.Log(s.Ratio/want.Ratio)) / tries
					if back := (s.At - epoch) / sensors.Second; back < at-1 || back > at+1 {
						t.Errorf("%s: it fell at %d s, seen at %d s", kind, at, back)
					}
				}
			}
		}
		t.Logf("%s: %d of %d seen, off by %.2f", kind, found, tries, off)
		if found < least || off > 0.25 {
			t.Errorf("%s: %d of %d seen, off by %.2f", kind, found, tries, off)
		}
	}
}

// Gusty air does not look like one more than once in two hours of a mast, and hardly
// any of the gust fronts that turn the wind about within seconds.
func TestAirIsNoStroke(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 9))
	const hours = 40
	count := 0
	for i := range hours {
		seen, _ := strokes(t, uint64(i), quantity.FromDirection(15*rng.Float64(), 360*rng.Float64()), 3600, still, sound)
		count += len(seen)
	}
	t.Logf("gusty air: %d in %d hours", count, hours)
	if count > hours/2 {
		t.Errorf("gusty air: %d strokes in %d hours", count, hours)
	}
	fronts, passing := 60, 0
	for i := range fronts {
		mean := quantity.FromDirection(3+8*rng.Float64(), 360*rng.Float64())
		step := quantity.FromDirection(8+8*rng.Float64(), 360*rng.Float64())
		width := 60 + 200*rng.Float64() // m, half of the change: Charba (1974) and Mahoney (1988) tell of 100 m and more; from memory
		speed := 6 + 9*rng.Float64()
		_, told := strokes(t, 1000+uint64(i), mean, 500, func(k int) quantity.Vector {
			share := (1 + math.Tanh(speed*float64(k-420)/width)) / 2
			return quantity.Vector{East: share * step.East, North: share * step.North}
		}, sound)
		for _, k := range told {
			if k > 360 && k < 480 {
				passing++
			}
		}
	}
	t.Logf("gust fronts: %d of %d", passing, fronts)
	if passing > fronts/20 {
		t.Errorf("%d of %d gust fronts are taken for strokes", passing, fronts)
	}
}

// A block in which an instrument changed holds one of both states, not a mixture of
// them.
func TestBlocksOfOneState(t *testing.T) {
	st := station(time.Second)
	r, add := feed(t, st, 30*time.Second) // blocks of 10, 20 and 60 s
	const at = 400
	for k := 1; k <= at+95; k++ {
		from, speed := 270.0, 10+0.1*float64(k%7)
		if k > at {
			from = 200
		}
		instant := epoch + sensors.Instant(k)*sensors.Second
		add(instant, speed, from+float64(k%3))
		m := r.Snapshot(instant).Mast(0)
		if k <= at+strokeAfter {
			continue
		}
		if m.Stroke.At != epoch+at*sensors.Second && m.Stroke.At != epoch+(at-1)*sensors.Second {
			t.Fatalf("at %d s: a stroke at %v", k, m.Stroke.At)
		}
		if turn := m.Stroke.Turn * 180 / math.Pi; math.Abs(turn-70) > 3 || m.Stroke.Ratio != 1 {
			t.Fatalf("at %d s: from west to south-south-west is a turn of %.0f degrees from east to north, and %g of the speed", k, turn, m.Stroke.Ratio)
		}
		if m.State != Live {
			t.Fatalf("at %d s: the mast is %s", k, m.State)
		}
		for b, blk := range m.Blocks {
			v := quantity.Vector{East: blk.East, North: blk.North}
			if !blk.Present || math.Abs(v.From()-271) > 1 && math.Abs(v.From()-201) > 1 {
				t.Errorf("at %d s: block %d is from %.1f", k, b, v.From())
			}
		}
	}
}

// Spikes are left out of the blocks and their turbulence, and stay in what people
// read; an onset is in the blocks two seconds later.
func TestSpikesLeftOut(t *testing.T) {
	st := station(time.Second)
	r, add := feed(t, st, 30*time.Second)
	instant := func(k int) sensors.Instant { return epoch + sensors.Instant(k)*sensors.Second }
	calm := func(k int) float64 { return 6 + 0.1*float64(k%5) }
	k := 1
	for ; k <= 900; k++ {
		speed := calm(k)
		if k%17 == 0 || k%170 == 1 {
			speed += 15
		}
		add(instant(k), speed, 269+float64(k%3))
		r.Snapshot(instant(k))
	}
	m := r.Snapshot(instant(900)).Mast(0)
	for b, blk := range m.Blocks {
		if math.Abs(blk.East-6.2) > 0.1 || !blk.Present {
			t.Errorf("block %d: %.3f m/s", b, blk.East)
		}
	}
	if m.Turbulence.Variance > 0.05 {
		t.Errorf("a variance of %.3f m2/s2", m.Turbulence.Variance)
	}
	if w, ok := r.Wind(0, instant(900)); !ok || w.Ten.Max < 20 {
		t.Errorf("people read at most %.1f m/s", w.Ten.Max)
	}
	for ; k <= 1000; k++ {
		speed := calm(k)
		if k > 960 {
			speed += 10
		}
		add(instant(k), speed, 269+float64(k%3))
		n, mean := 0, 0.0
		for j := k - 9; j <= k; j++ { // the newest block
			if n++; j > 960 && k >= 963 {
				mean += calm(j) + 10
			} else {
				mean += calm(j)
			}
		}
		if blk := r.Snapshot(instant(k)).Mast(0).Blocks[0]; (k <= 960 || k >= 963) && math.Abs(blk.East-mean/float64(n)) > 0.01 {
			t.Errorf("at %d s the newest block is %.3f m/s, want %.3f", k, blk.East, mean/float64(n))
		}
	}
}

// After an outage nothing is known of what a mast usually does: no turn of the wind is
// held against it.
func TestNoStrokeAfterAnOutage(t *testing.T) {
	st := station(time.Second)
	r, add := feed(t, st, 30*time.Second)
	for k := 1; k <= 1200; k++ {
		instant := epoch + sensors.Instant(k)*sensors.Second
		from := 270.0
		if k > 1040 {
			from = 200
		}
		if k <= 400 || k > 1000 {
			add(instant, 10+0.1*float64(k%7), from+float64(k%3))
		}
		if s := r.Snapshot(instant).Mast(0).Stroke; s.At != 0 {
			t.Fatalf("at %d s: a stroke at %v", k, s.At)
		}
	}
}

// What waits, and what is a spike, has been heard: neither takes a mast out of service,
// nor does an onset, however short its window and however seldom it reports.
func TestWhatWaitsIsHeard(t *testing.T) {
	for _, interval := range []time.Duration{time.Second, 2 * time.Second} {
		for _, window := range []time.Duration{6 * time.Second, 18 * time.Second, 30 * time.Second} {
			st := station(interval)
			r, add := feed(t, st, window)
			rng := rand.New(rand.NewPCG(8, 1))
			out, held := 0, 0
			const seconds = 3000
			for k := 1; k <= seconds; k++ {
				instant := epoch + sensors.Instant(k)*sensors.Second
				if k%int(interval/time.Second) == 0 {
					speed := 8 + 0.3*rng.NormFloat64()
					if k > 2000 {
						speed += 10
					} else if k > 300 && rng.Float64() < 0.1 {
						speed += 12
					}
					if add(instant, speed, 268+float64(k%5)).Waits() {
						held++
					}
				}
				m := r.Snapshot(instant).Mast(0)
				if k > 100 && m.State != Live {
					out++
				}
				if b := m.Blocks[0]; k > 2010 && (b.East < 17 || b.East > 19) {
					t.Errorf("every %s, window of %s: %d s after an onset the newest block is %.1f m/s", interval, window, k-2000, b.East)
				}
			}
			if out > 0 || held < 50 {
				t.Errorf("every %s, window of %s: not live in %d of %d steps; %d readings waited", interval, window, out, seconds, held)
			}
		}
	}
}

// An onset after which a mast falls silent for some seconds is believed all the same.
func TestNothingWaitsForEver(t *testing.T) {
	st := station(time.Second)
	st.StaleAfter = 10 * time.Second
	r, add := feed(t, st, 30*time.Second)
	for k := 1; k <= 307; k++ {
		instant := epoch + sensors.Instant(k)*sensors.Second
		switch {
		case k <= 300:
			add(instant, 6+0.1*float64(k%7), 269+float64(k%3))
		case k <= 302:
			if !add(instant, 20, 269+float64(k%3)).Waits() {
				t.Fatalf("the onset at %d s does not wait", k)
			}
		}
		r.Snapshot(instant)
	}
	if len(r.masts[0].held) > 0 {
		t.Error("it waits for ever")
	}
	if v, ok := r.masts[0].wind(epoch + 302*sensors.Second); !ok || v.East < 19 {
		t.Errorf("what waited is not believed: %.1f m/s", v.East)
	}
}

// Whoever works on a mast has seen to what its instrument did before.
func TestStrokeEndsWithMaintenance(t *testing.T) {
	st := station(time.Second)
	st.Maintenance = []sensors.Maintenance{{From: epoch + 500*sensors.Second, To: epoch + 560*sensors.Second}}
	r, add := feed(t, st, 30*time.Second)
	for k := 1; k <= 700; k++ {
		instant := epoch + sensors.Instant(k)*sensors.Second
		from := 270.0
		if k > 400 && k < 540 {
			from = 200
		}
		add(instant, 10+0.1*float64(k%7), from+float64(k%3))
		switch s := r.Snapshot(instant).Mast(0).Stroke; {
		case k == 450 && s.At == 0:
			t.Fatal("no stroke is seen")
		case k > 500 && s.At != 0:
			t.Fatalf("at %d s: a stroke at %v", k, s.At)
		}
	}
}
