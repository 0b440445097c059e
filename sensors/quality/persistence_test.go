package quality

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"sockline/sensors"
)

// spell is a stretch of readings.
type spell struct {
	seconds  int
	interval float64                                                   // s; 0: 1 s
	wind     func(source *rand.Rand, i int) (speed, direction float64) // of the i-th reading
}

// The winds of the spells. moving has enough digits never to repeat.
func moving(s *rand.Rand, _ int) (float64, float64)      { return 5 + s.Float64(), 240 + 9*s.Float64() }
func frozen(_ *rand.Rand, _ int) (float64, float64)      { return 6.4, 245 }
func frozenVane(s *rand.Rand, _ int) (float64, float64)  { return 5 + s.Float64(), 245 }
func calm(_ *rand.Rand, _ int) (float64, float64)        { return 0, 0 }
func frozenLight(_ *rand.Rand, _ int) (float64, float64) { return 1.3, 245 }
func slowVane(s *rand.Rand, _ int) (float64, float64)    { return 1 + 0.9*s.Float64(), 245 }
func frozenCups(s *rand.Rand, _ int) (float64, float64)  { return 6.4, 240 + 9*s.Float64() }

func TestPersistence(t *testing.T) {
	for _, row := range []struct {
		name   string
		spells []spell
		first  int    // index of the first rejected reading; -1: none
		count  int    // of rejected readings
		flags  string // of the first rejected
	}{
		// 1 Hz: the reading at +120 s is the 121st, the first to span 120 s.
		{"stuck", []spell{{300, 1, frozen}}, 120, 180, "stuck"},
		{"stuck until it moves", []spell{{200, 1, frozen}, {100, 1, moving}}, 120, 80, "stuck"},
		{"not stuck for long enough", []spell{{120, 1, frozen}, {60, 1, moving}}, -1, 0, ""},
		{"again later", []spell{{100, 1, frozen}, {1, 1, moving}, {125, 1, frozen}}, 221, 5, "stuck"},
		{"at 5 Hz it also takes 120 s", []spell{{130, 0.2, frozen}}, 600, 50, "stuck"},
		{"every 2 s: the 61st", []spell{{140, 2, frozen}}, 60, 10, "stuck"},
		{"every 5 s: the 60th", []spell{{400, 5, frozen}}, 59, 21, "stuck"},
		{"every 10 s: not asked", []spell{{3600, 10, frozen}}, -1, 0, ""},
		{"in light air it takes 300 s", []spell{{400, 1, frozenLight}}, 300, 100, "stuck"},
		{"calm is not stuck", []spell{{3600, 1, calm}}, -1, 0, ""},
		{"cups alone", []spell{{3600, 1, frozenCups}}, -1, 0, ""},
		{"vane alone", []spell{{400, 1, frozenVane}}, 300, 100, "stuck-vane"},
		{"vane alone until it moves", []spell{{350, 1, frozenVane}, {50, 1, moving}}, 300, 50, "stuck-vane"},
		{"vane in light air", []spell{{3600, 1, slowVane}}, -1, 0, ""},
		{"vane, with a lull between", []spell{{200, 1, frozenVane}, {1, 1, slowVane}, {299, 1, frozenVane}}, -1, 0, ""},
		{"vane first, then all", []spell{{310, 1, frozenVane}, {200, 1, frozen}}, 300, 210, "stuck-vane"},
		{"moving", []spell{{3600, 1, moving}}, -1, 0, ""},
	} {
		t.Run(row.name, func(t *testing.T) {
			source := rand.New(rand.NewPCG(9, 10))
			c := NewChecker(sensors.Station{})
			first, count, index, flags := -1, 0, 0, ""
			at := float64(noon)
			for _, part := range row.spells {
				for i := range int(math.Round(float64(part.seconds) / part.interval)) {
					speed, from := part.wind(source, i)
					got := c.Check(sensors.Reading{Time: sensors.Instant(math.Round(at)), Speed: speed, From: from})
					if got.Verdict() == Rejected {
						if first < 0 {
							first, flags = index, got.Flags().String()
						}
						count++
					}
					at += 1000 * part.interval
					index++
				}
			}
			if first != row.first || count != row.count || flags != row.flags {
				t.Errorf("first %d, %d rejected, %q; want %d, %d, %q", first, count, flags, row.first, row.count, row.flags)
			}
		})
	}
}

func TestSilenceEndsARun(t *testing.T) {
	c := NewChecker(sensors.Station{})
	at := noon
	for i := range 1000 {
		at += sensors.Second
		if i%100 == 99 {
			at += 9 * sensors.Second // 10 s from one reading to the next
		}
		if got := c.Check(sensors.Reading{Time: at, Speed: 6.4, From: 245}); got.Verdict() != Accepted {
			t.Fatalf("reading %d: %v %v", i, got.Verdict(), got.Flags())
		}
	}
}

func TestSteadyAirIsNotStuck(t *testing.T) {
	// Still air, still more so than neutral air over the sea (intensity 0.092,
	// from its roughness 0.0002 m), through instruments of whole degrees: an
	// AR(1) wind of memory L/U, L = 56.7 m, with the crosswise component 0.8 of
	// the lengthwise (IEC 61400-1). Six hours each, no reading may be rejected.
	const length, hours = 56.7, 6
	for _, mean := range []float64{0.6, 1, 2, 2.5, 5} {
		for _, intensity := range []float64{0.02, 0.05} {
			for _, resolution := range []float64{0.1, 0.5} { // m/s
				t.Run(fmt.Sprintf("%v m/s, intensity %v, in steps of %v m/s", mean, intensity, resolution), func(t *testing.T) {
					source := rand.New(rand.NewPCG(uint64(100*mean), uint64(1000*intensity)))
					c := NewChecker(sensors.Station{})
					rho := math.Exp(-mean / length)
					sd := intensity * mean
					u, v := 0.0, 0.0
					for i := range hours * 3600 {
						u = rho*u + math.Sqrt(1-rho*rho)*sd*source.NormFloat64()
						v = rho*v + math.Sqrt(1-rho*rho)*0.8*sd*source.NormFloat64()
						speed := math.Round(math.Hypot(mean+u, v)/resolution) * resolution
						from := math.Mod(360+math.Round(math.Atan2(v, mean+u)*180/math.Pi), 360)
						got := c.Check(sensors.Reading{Time: noon + sensors.Instant(i)*1000, Speed: speed, From: from})
						if got.Verdict() == Rejected {
							t.Fatalf("second %d: %v m/s from %v rejected as %v", i, speed, from, got.Flags())
						}
					}
				})
			}
		}
	}
}

func TestTenMinutesDecide(t *testing.T) {
	// A checker that begins ten minutes before a reading comes to the same
	// verdict on it as one that has seen everything.
	source := rand.New(rand.NewPCG(11, 12))
	winds := []func(*rand.Rand, int) (float64, float64){moving, frozen, frozenLight, frozenVane, calm, slowVane, frozenCups,
		func(s *rand.Rand, _ int) (float64, float64) { return 79 * s.Float64(), 245 }}
	for range 20 {
		var readings []sensors.Reading
		at := noon
		for range 25 {
			wind := winds[source.IntN(len(winds))]
			interval := []int{200, 1000, 1000, 3000, 8999, 9001}[source.IntN(6)]
			for i := range 20 + source.IntN(500) {
				speed, from := wind(source, i)
				readings = append(readings, sensors.Reading{Time: at, Speed: speed, From: from})
				at += sensors.Instant(interval)
			}
			if source.IntN(3) == 0 {
				at += sensors.Instant(source.IntN(120_000))
			}
		}
		whole := NewChecker(sensors.Station{})
		verdicts := make([]Checked, len(readings))
		rejected := 0
		for i, r := range readings {
			verdicts[i] = whole.Check(r)
			if verdicts[i].Verdict() == Rejected {
				rejected++
			}
		}
		if rejected == 0 || rejected == len(readings) {
			t.Fatalf("%d of %d rejected: the winds test nothing", rejected, len(readings))
		}
		for range 60 {
			i := source.IntN(len(readings))
			from := i
			for from > 0 && readings[i].Time.Sub(readings[from-1].Time) <= 10*time.Minute {
				from--
			}
			part := NewChecker(sensors.Station{})
			var got Checked
			for _, r := range readings[from : i+1] {
				got = part.Check(r)
			}
			if got != verdicts[i] {
				t.Fatalf("reading %d of %d, %+v: %v %q from ten minutes, %v %q from all", i, len(readings), readings[i],
					got.Verdict(), got.Flags(), verdicts[i].Verdict(), verdicts[i].Flags())
			}
		}
	}
}
