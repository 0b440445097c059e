package quality

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"sockline/sensors"
)

// turbulent is a wind as the surface layer has it: mean u in m/s, standard
// deviation 0.14 (0.75 u + 5.6), a memory of 57 m / u (IEC 61400-1, from
// memory), read once a second.
func turbulent(rng *rand.Rand, u float64) func() float64 {
	sigma, rho := 0.14*(0.75*u+5.6), math.Exp(-u/57)
	x := 0.0
	return func() float64 {
		x = rho*x + math.Sqrt(1-rho*rho)*sigma*rng.NormFloat64()
		return math.Round(10*math.Max(0, u+x)) / 10
	}
}

// spikesOf gives a checker speeds once every interval and returns the indices of
// those that the next reading calls a spike; all must be usable.
func spikesOf(t *testing.T, speeds []float64, interval time.Duration) (spikes []int) {
	t.Helper()
	c := NewChecker(sensors.Station{})
	for k, s := range speeds {
		at := minuteStart.Add(time.Duration(k) * interval)
		got := c.Check(sensors.Reading{Time: at, Arrival: at, Speed: s, From: float64((k * 7) % 360)})
		if !got.Usable() {
			t.Fatalf("reading %d of %g m/s is %s: %s", k, s, got.Verdict(), got.Flags())
		}
		if got.Flags()&FlagSpike != 0 {
			if got.Flags() == FlagSpike && got.Verdict() != Accepted {
				t.Fatalf("reading %d is %s for the spike before it", k, got.Verdict())
			}
			spikes = append(spikes, k-1)
		}
	}
	return spikes
}

// A single reading that stands out is noted with the next one; what stays, or
// rises over seconds, is not; and nothing is ever refused for it.
func TestSpike(t *testing.T) {
	calmWind := func(n int) []float64 {
		s := make([]float64, n)
		for k := range s {
			s[k] = 6 + 0.3*float64(k%5-2)
		}
		return s
	}
	for _, test := range []struct {
		name   string
		change func(s []float64)
		want   []int
	}{
		{"one reading up", func(s []float64) { s[40] = 14 }, []int{40}},
		{"two readings up", func(s []float64) { s[40], s[41] = 14, 17 }, []int{41}},
		{"two readings, the second of which is one of two", func(s []float64) { s[40], s[42] = 14, 15 }, []int{40, 42}},
		{"one reading down", func(s []float64) { s[40] = 0.2 }, []int{40}},
		{"before there is a measure", func(s []float64) { s[5] = 14 }, nil},
		{"an onset that stays", func(s []float64) {
			for k := 40; k < len(s); k++ {
				s[k] += 15
			}
		}, nil},
		{"a gust of three seconds", func(s []float64) { s[40], s[41], s[42] = 12, 14, 12 }, nil},
		{"an outflow that grows", func(s []float64) {
			for k := 40; k < len(s); k++ {
				s[k] += 1.5 * float64(min(k-40, 10))
			}
		}, nil},
	} {
		s := calmWind(80)
		test.change(s)
		got := spikesOf(t, s, time.Second)
		if !slices.Equal(got, test.want) {
			t.Errorf("%s: spikes at %v, want %v", test.name, got, test.want)
		}
	}
	s := calmWind(80)
	s[40] = 14
	if got := spikesOf(t, s, 5*time.Second); len(got) != 0 {
		t.Errorf("every 5 s: spikes at %v", got)
	}
}

// Turbulence has few spikes, and those that an instrument puts on it are found.
func TestSpikesInTurbulence(t *testing.T) {
	for _, u := range []float64{3, 8, 15} {
		rng := rand.New(rand.NewPCG(31, 37))
		wind := turbulent(rng, u)
		const n = 6 * 3600
		speeds := make([]float64, n)
		var put []int
		for k := range speeds {
			speeds[k] = wind()
		}
		plain := spikesOf(t, speeds, time.Second)
		for k := 100; k < n; k += 216 { // a hundred
			speeds[k] += 15
			put = append(put, k)
		}
		found := map[int]bool{}
		for _, k := range spikesOf(t, speeds, time.Second) {
			found[k] = true
		}
		hits := 0
		for _, k := range put {
			if found[k] {
				hits++
			}
		}
		t.Logf("%g m/s: %.1f an hour without cause, %d of %d found", u, float64(len(plain))/6, hits, len(put))
		if len(plain) > 6*10 || hits < len(put)*9/10 {
			t.Errorf("%g m/s: %d without cause in six hours, %d of %d found", u, len(plain), hits, len(put))
		}
	}
}

// What an instrument adds to a tenth of its readings is found, also where two follow
// one another, and nothing waits for longer than a spike may last.
func TestManySpikes(t *testing.T) {
	for _, u := range []float64{3, 8, 15} {
		rng := rand.New(rand.NewPCG(41, 43))
		wind, c := turbulent(rng, u), NewChecker(sensors.Station{})
		put, left, waiting := 0, 0, []bool(nil)
		believe := func() {
			for _, spiked := range waiting {
				if spiked {
					left++
				}
			}
			waiting = nil
		}
		for k := range 6 * 3600 {
			speed, spiked := wind(), rng.Float64() < 0.1
			if spiked {
				speed += 12
				put++
			}
			at := minuteStart.Add(time.Duration(k) * time.Second)
			got := c.Check(sensors.Reading{Time: at, Arrival: at, Speed: speed, From: float64((k * 7) % 360)})
			if got.Spikes() {
				waiting = nil
			}
			if !got.Waits() {
				believe()
			}
			if waiting = append(waiting, spiked); !got.Waits() {
				believe()
			}
			if len(waiting) > LongestSpike {
				t.Fatalf("%g m/s: %d readings wait", u, len(waiting))
			}
		}
		t.Logf("%g m/s: %d of %d spikes are believed", u, left, put)
		// Three in a row, of which there are one in a hundred, are an onset.
		if left > put/10 {
			t.Errorf("%g m/s: %d of %d spikes are believed", u, left, put)
		}
	}
}

// A vane that goes about while the cup stands is odd; a calm with a vane that
// rests is not, and a wind that blows again ends it.
func TestCalmButTurning(t *testing.T) {
	check := func(seconds int, speed func(int) float64, from func(int) float64) (flagged int) {
		c := NewChecker(sensors.Station{})
		for k := range seconds {
			at := minuteStart + sensors.Instant(k)*sensors.Second
			got := c.Check(sensors.Reading{Time: at, Arrival: at, Speed: speed(k), From: from(k)})
			if got.Flags()&FlagCalmTurning != 0 {
				flagged++
				if got.Verdict() != Suspect {
					t.Errorf("at %d s the verdict is %s", k, got.Verdict())
				}
			}
		}
		return flagged
	}
	zero := func(int) float64 { return 0 }
	about := func(k int) float64 { return float64((300 + 3*(k%60)) % 360) }
	if n := check(200, zero, about); n != 80 { // from 120 s on
		t.Errorf("flagged are %d readings, want 80", n)
	}
	if n := check(600, zero, func(k int) float64 { return float64(200 + k%3) }); n != 0 {
		t.Errorf("a resting vane: %d", n)
	}
	if n := check(600, func(k int) float64 { return 0.1 * float64(k%2) }, about); n != 0 {
		t.Errorf("a breath of wind: %d", n)
	}
}
