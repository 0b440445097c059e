package outflow

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"sockline/alerting/windfield"
	"sockline/sensors"
	"sockline/sensors/synthetic"
)

// motionSeed is the first seed of the outflows of TestMotionOverSeeds.
const motionSeed = 7_200_000

// moved is what one drawn outflow showed at one moment.
type moved struct {
	known        bool
	east, north  float64 // told, m/s
	ve, vn       float64 // true
	spread       float64
	reach, truly float64 // s until the ring comes to the second path; 0: not to be told
	reachTold    bool
}

// drawMoving is an outflow of either model that stands from second 240 on and
// moves eastward over the lattice, m/s and m.
func drawMoving(rng *rand.Rand) synthetic.Outflow {
	between := func(low, high float64) float64 { return low + (high-low)*rng.Float64() }
	model := synthetic.ModelVicroy
	if rng.IntN(2) == 0 {
		model = synthetic.ModelOsegueraBowles
	}
	speed, toward := between(2, 11), between(30, 150)*math.Pi/180
	o := synthetic.Outflow{
		Model: model, Strength: between(9, 15), Radius: between(700, 1400), Stretch: 1,
		MotionX: speed * math.Sin(toward), MotionY: speed * math.Cos(toward),
		History: synthetic.History{Starts: 240, Grows: 90, Holds: 3600, Fades: 60},
	}
	// In the midst of the lattice at second 420, give or take.
	o.X, o.Y = between(-500, 500)-180*o.MotionX, between(-500, 500)-180*o.MotionY
	return o
}

// follow plays a drawn outflow and looks at it when it has been there for two,
// three and four minutes. The masts report every second; the field is asked on
// the grid of the tracker only.
func follow(s *site, seed uint64) (seen []moved) {
	rng := rand.New(rand.NewPCG(seed, 3))
	o := drawMoving(rng)
	s.tracker = NewTracker([]Path{{FromX: 2000, FromY: -6000, ToX: 2000, ToY: 6000}}, windfield.DefaultPrior().OutflowSpacing)
	wind, air := 2+4*rng.Float64(), 0.9
	rho := math.Exp(-1.0 / 6)
	fresh := math.Sqrt(1 - rho*rho)
	gusts := make([][2]float64, len(s.masts))
	for k := 1; k <= 480; k++ {
		at := epoch + sensors.Instant(k)*sensors.Second
		for i, m := range s.masts {
			for c := range gusts[i] {
				gusts[i][c] = rho*gusts[i][c] + fresh*air*rng.NormFloat64()
			}
			e, n := o.Wind(m.X, m.Y, 10, float64(k))
			u, v := wind+gusts[i][0]+e, gusts[i][1]+n
			from := math.Mod(math.Atan2(-u, -v)*180/math.Pi+360, 360)
			if c := s.checkers[i].Check(sensors.Reading{Station: i, Time: at, Arrival: at, Speed: math.Hypot(u, v), From: from}); c.Usable() {
				s.recorder.Add(c)
			}
		}
		if k%5 != 0 {
			continue
		}
		found := s.tracker.Step(at, s.field.Step(s.recorder.Snapshot(at)))
		if k < 360 || k%60 != 0 {
			continue
		}
		m := moved{ve: o.MotionX, vn: o.MotionY}
		x := o.X + o.MotionX*float64(k-240)
		if ahead := (2000 - o.Radius - x) / o.MotionX; ahead > 30 && ahead < 240 {
			m.truly = ahead
		}
		if len(found) > 0 && found[0].Motion.Known {
			f := &found[0]
			m.known, m.east, m.north, m.spread = true, f.Motion.East, f.Motion.North, f.Motion.Spread
			for _, r := range f.Reaches {
				if r.Path == 0 {
					m.reachTold, m.reach = true, r.Seconds
				}
			}
		}
		seen = append(seen, m)
	}
	return seen
}

func median(x []float64) float64 {
	slices.Sort(x)
	return x[len(x)/2]
}

// TestMotionOverSeeds bounds the bias and the error of motion and arrival over
// drawn outflows of 2 to 11 m/s, looked at two, three and four minutes after
// their begin, in turbulence of 0.9 m/s. What is told of the speed is a quarter
// too little: little is known of it yet, and what is not known is taken for rest
// (with twice the spread of the prior it is 0.84, and the median error more).
// Over 96 outflows: 0.76 of the speed, off by 2.5 m/s in the median of 6.8; the
// arrival 9 s late, off by 43 s in the median.
func TestMotionOverSeeds(t *testing.T) {
	if racing {
		t.Skip("the race detector has nothing to find in one goroutine")
	}
	const outflows = 24
	var all []moved
	for k := range uint64(outflows) {
		all = append(all, follow(newSite(t), motionSeed+k)...)
	}
	var dot, square, cross float64
	var off, late, missed []float64
	within, arrivals := 0, 0
	for _, m := range all {
		if m.truly > 0 {
			arrivals++
		}
		if !m.known {
			continue
		}
		dot += m.east*m.ve + m.north*m.vn
		square += m.ve*m.ve + m.vn*m.vn
		cross += m.east*m.vn - m.north*m.ve
		d := math.Hypot(m.east-m.ve, m.north-m.vn)
		off = append(off, d)
		if d <= m.spread*math.Sqrt(-2*math.Log(0.1)) { // 90 % of a round normal law
			within++
		}
		if m.truly > 0 && m.reachTold {
			late = append(late, m.reach-m.truly)
			missed = append(missed, math.Abs(m.reach-m.truly))
		}
	}
	known := len(off)
	if known < len(all)*9/10 || len(late) < arrivals/2 || len(late) < 10 {
		t.Fatalf("motion is told in %d of %d cases, arrival in %d of %d", known, len(all), len(late), arrivals)
	}
	along, across, held := dot/square, cross/square, float64(within)/float64(known)
	t.Logf("motion told in %d of %d cases: %.2f of the true one along it and %+.2f across, off by %.1f m/s in the median (true %.1f m/s), within the spread of 90 %% in %.2f",
		known, len(all), along, across, median(off), math.Sqrt(square/float64(known)), held)
	t.Logf("arrivals within four minutes told in %d of %d cases, %+.0f s late in the median, off by %.0f s", len(late), arrivals, median(late), median(missed))
	if along < 0.65 || along > 1.05 || math.Abs(across) > 0.12 {
		t.Errorf("the motion told is %.2f of the true one along it and %.2f across", along, across)
	}
	if median(off) > 3.1 || held < 0.85 {
		t.Errorf("the motion is off by %.1f m/s in the median, its spread of 90 %% holds %.2f", median(off), held)
	}
	if math.Abs(median(late)) > 25 || median(missed) > 65 {
		t.Errorf("arrivals are %+.0f s late in the median, and off by %.0f s", median(late), median(missed))
	}
}
