package quality

import (
	"math/rand/v2"
	"testing"
	"time"

	"sockline/sensors"
)

// minuteStart is a whole UTC minute.
const minuteStart = sensors.Instant(1_782_907_200_000)

// clocksOf makes stations of which the first so many have their clocks
// corrected.
func clocksOf(n, corrected int) *Clocks {
	stations := make([]sensors.Station, n)
	for i := range stations {
		stations[i] = sensors.Station{ID: string(rune('a' + i)), CorrectClock: i < corrected}
	}
	return NewClocks(stations)
}

// minutes plays minutes with a reading a second of each station; ahead says how
// far a clock is ahead in a minute. Each message takes 50 to 400 ms and one of
// fifty much longer.
func minutes(c *Clocks, rng *rand.Rand, from, to int, ahead func(station, minute int) time.Duration) (changes int) {
	for m := from; m < to; m++ {
		for s := range 60 {
			for i := range c.masts {
				at := minuteStart + sensors.Instant(m*60_000+s*1000+i)
				way := time.Duration(50+rng.IntN(350)) * time.Millisecond
				if rng.IntN(50) == 0 {
					way += time.Duration(rng.IntN(20)) * time.Second
				}
				c.Take(sensors.Reading{Station: i, Time: at.Add(ahead(i, m)), Arrival: at.Add(way)})
			}
		}
		if c.Turn(minuteStart + sensors.Instant((m+1)*60_000)) {
			changes++
		}
	}
	return changes
}

func TestClockOfOneStation(t *testing.T) {
	for _, test := range []struct {
		name            string
		ahead           time.Duration
		correct         bool
		off             bool
		least, greatest time.Duration // applied
	}{
		{"right", 0, true, false, 0, 0},
		{"300 ms ahead", 300 * time.Millisecond, true, false, 0, 0},
		{"5 s ahead", 5 * time.Second, true, true, 4900 * time.Millisecond, 5 * time.Second},
		{"5 s ahead, to be told only", 5 * time.Second, false, true, 0, 0},
		{"5 s behind", -5 * time.Second, true, true, -5200 * time.Millisecond, -5 * time.Second},
		{"an hour ahead", time.Hour, true, true, 0, 0},
	} {
		rng := rand.New(rand.NewPCG(1, 7))
		c := clocksOf(4, 0)
		c.masts[0].correct = test.correct
		ahead := func(i, _ int) time.Duration {
			if i == 0 {
				return test.ahead
			}
			return 0
		}
		minutes(c, rng, 0, 2, ahead)
		if s := c.Skew(0); s.Known || s.Applied != 0 {
			t.Errorf("%s: %+v is known after two minutes", test.name, s)
		}
		minutes(c, rng, 2, 12, ahead)
		s := c.Skew(0)
		if !s.Known || (s.Ahead-test.ahead).Abs() > 150*time.Millisecond || s.Off != test.off ||
			s.Applied < test.least || s.Applied > test.greatest || s.Applied%(100*time.Millisecond) != 0 {
			t.Errorf("%s: %+v", test.name, s)
		}
		// Once it is known it does not flutter, and the others are left alone.
		if n := minutes(c, rng, 12, 72, ahead); n != 0 {
			t.Errorf("%s: what is taken out changed %d times in an hour", test.name, n)
		}
		for i := 1; i < 4; i++ {
			if s := c.Skew(i); s.Off || s.Applied != 0 {
				t.Errorf("%s: station %d: %+v", test.name, i, s)
			}
		}
		at := minuteStart.Add(90 * time.Minute)
		r := c.Take(sensors.Reading{Station: 0, Time: at.Add(test.ahead), Arrival: at + 100})
		if r.Time != at.Add(test.ahead-s.Applied) || r.Arrival != at+100 {
			t.Errorf("%s: a reading gets the time %v", test.name, r.Time.Sub(at))
		}
	}
}

// A clock that is set is known again within five minutes.
func TestClockThatIsSet(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 7))
	c := clocksOf(4, 1)
	ahead := func(i, m int) time.Duration {
		if i == 0 && m < 20 {
			return 5 * time.Second
		}
		return 0
	}
	minutes(c, rng, 0, 20, ahead)
	if s := c.Skew(0); s.Applied < 4900*time.Millisecond {
		t.Fatalf("%+v", s)
	}
	minutes(c, rng, 20, 25, ahead)
	if s := c.Skew(0); s.Applied != 0 || s.Off {
		t.Errorf("five minutes after it was set right: %+v", s)
	}
}

// A broker that hands out its backlog shows no clock: every second reading is
// a second less late than the one before.
func TestBacklogIsNoClock(t *testing.T) {
	c := clocksOf(1, 1)
	for m := range 5 {
		for s := range 60 {
			at := minuteStart + sensors.Instant(m*60_000+s*1000)
			arrival := minuteStart.Add(20*time.Minute) + sensors.Instant(s)
			c.Take(sensors.Reading{Time: at, Arrival: arrival})
		}
		c.Turn(minuteStart.Add(20*time.Minute) + sensors.Instant((m+1)*60_000))
	}
	if s := c.Skew(0); s.Known || s.Applied != 0 {
		t.Errorf("%+v", s)
	}
}

// What all stations share is the clock of this host: it is taken out of all,
// by a tenth of a second a minute, whether they are to be corrected or not.
func TestSharedError(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 7))
	c := clocksOf(6, 0)
	slew := func(_, m int) time.Duration { return -time.Duration(m) * 60 * time.Millisecond }
	for m := range 60 {
		minutes(c, rng, m, m+1, slew)
		// The estimate is the median of ten minutes, so it is five late: 300 ms.
		if m > 15 {
			if left := slew(0, m) - c.Shared(); left.Abs() > 600*time.Millisecond {
				t.Fatalf("minute %d: %v of %v are left", m, left, slew(0, m))
			}
		}
	}
	for i := range 6 {
		if s := c.Skew(i); s.Off || s.Applied != c.Shared() {
			t.Errorf("station %d is blamed: %+v", i, s)
		}
	}
	// Two that agree are not enough against three that do not.
	c = clocksOf(5, 0)
	minutes(c, rng, 0, 20, func(i, _ int) time.Duration {
		if i < 2 {
			return -2 * time.Second
		}
		return 0
	})
	if c.Shared() != 0 || !c.Skew(0).Off || c.Skew(4).Off {
		t.Errorf("shared %v, %+v", c.Shared(), c.Skew(0))
	}
}

// The table takes a run on where the last one ended; a table that makes no
// sense is refused whole.
func TestClockTable(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 7))
	c := clocksOf(4, 2)
	minutes(c, rng, 0, 12, func(i, _ int) time.Duration { return time.Duration(3-3*i) * time.Second })
	d := clocksOf(4, 2)
	if err := d.Load(c.Table()); err != nil {
		t.Fatal(err)
	}
	if c.Skew(0).Applied == 0 || d.Skew(0).Applied != c.Skew(0).Applied || d.Skew(3).Applied != 0 {
		t.Errorf("%s: %+v and %+v", c.Table(), c.Skew(0), d.Skew(0))
	}
	e := clocksOf(4, 0) // nobody wants it any more
	if err := e.Load(c.Table()); err != nil || e.Skew(0).Applied != c.Shared() {
		t.Errorf("%v, %+v", err, e.Skew(0))
	}
	for _, bad := range []string{"", "[]", `{"shared_ms":99999}`, `{"shared_ms":33}`, `{"ahead_ms":{"a":777}}`, `{"ahead_ms":{"a":9000000000000}}`} {
		if err := clocksOf(4, 2).Load([]byte(bad)); err == nil {
			t.Errorf("%s is accepted", bad)
		}
	}
}

// A reading without a time of its own, or out of the broker's memory, says
// nothing of a clock.
func TestNoTimeNoClock(t *testing.T) {
	c := clocksOf(1, 1)
	for m := range 12 {
		for s := range 60 {
			at := minuteStart + sensors.Instant(m*60_000+s*1000)
			c.Take(sensors.Reading{Time: at, Arrival: at})
			c.Take(sensors.Reading{Time: at, Arrival: at.Add(time.Hour), Retained: true})
		}
		c.Turn(minuteStart + sensors.Instant((m+1)*60_000))
	}
	if s := c.Skew(0); s.Known || s.Applied != 0 {
		t.Errorf("%+v", s)
	}
}
