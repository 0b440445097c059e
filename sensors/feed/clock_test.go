package feed

import (
	"math/rand/v2"
	"sync"
	"testing"
	"time"

	"sockline/sensors"
)

// hostClocks are the two clocks of a host, under the test's control.
type hostClocks struct {
	wall time.Time
	mono time.Duration
}

func (h *hostClocks) pass(d time.Duration) { h.wall, h.mono = h.wall.Add(d), h.mono+d }

func (h *hostClocks) clock(t *testing.T, speed float64) *Clock {
	t.Helper()
	c, err := NewClockOver(func() time.Time { return h.wall }, func() time.Duration { return h.mono }, speed)
	if err != nil {
		t.Fatal(err)
	}
	return c
}

// noon is an arbitrary start, given to the nanosecond to see the cut to ms.
func noon() time.Time { return time.Date(2026, 7, 1, 12, 0, 0, 120_999_999, time.UTC) }

func TestClockHoldsWhenTheHostClockIsStepped(t *testing.T) {
	tests := []struct {
		name string
		step time.Duration
	}{
		{"one second ahead", time.Second},
		{"one second back", -time.Second},
		{"one minute ahead", time.Minute},
		{"one minute back", -time.Minute},
		{"one hour ahead", time.Hour},
		{"one hour back", -time.Hour},
		{"back to 1970", time.Unix(0, 0).Sub(noon())},
		{"a century ahead", 100 * 365 * 24 * time.Hour},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			h := &hostClocks{wall: noon()}
			c := h.clock(t, 1)
			start := c.Now()
			if want := sensors.At(noon()); start != want {
				t.Fatalf("first stamp %v, want the wall time %v", start, want)
			}
			h.wall = h.wall.Add(tt.step)
			if got := c.Offset(); got != tt.step {
				t.Errorf("right after the step the offset is %v, want %v", got, tt.step)
			}
			if c.Now() != start {
				t.Errorf("the step moved the stamp from %v", start)
			}
			// 1000 s in steps of a second: the clock may gain or lose 1 ms in
			// each (design: at most 1 ms a second), and must use all of it.
			last := start
			for range 1000 {
				h.pass(time.Second)
				now := c.Now()
				if gone := now - last; gone < 999 || gone > 1001 {
					t.Fatalf("a second was %d ms long", gone)
				}
				last = now
			}
			correction := time.Second
			if tt.step < 0 {
				correction = -correction
			}
			if got, want := last.Sub(start), 1000*time.Second+correction; got != want {
				t.Errorf("after 1000 s the stamp moved %v, want %v", got, want)
			}
			if got, want := c.Offset(), tt.step-correction; got != want {
				t.Errorf("after 1000 s the offset is %v, want %v", got, want)
			}
		})
	}
}

func TestClockIsDrawnInWhenAskedOften(t *testing.T) {
	h := &hostClocks{wall: noon()}
	c := h.clock(t, 1)
	h.wall = h.wall.Add(10 * time.Millisecond)
	// 20 s in calls 100 us apart, closer than a correction's grain.
	for range 20 * 10_000 {
		h.pass(100 * time.Microsecond)
		c.Now()
	}
	if got := c.Offset(); got != 0 {
		t.Errorf("an offset of 10 ms is %v after 20 s, want 0: 1 ms a second takes 10 s", got)
	}
}

func TestClockNeverGoesBack(t *testing.T) {
	const seed = 7
	random := rand.New(rand.NewPCG(seed, seed))
	h := &hostClocks{wall: noon()}
	c := h.clock(t, 1)
	last := c.Now()
	for i := range 10_000 {
		h.pass(time.Duration(random.Int64N(int64(3 * time.Second))))
		if random.IntN(4) == 0 {
			h.wall = h.wall.Add(time.Duration(random.Int64N(int64(48*time.Hour))) - 24*time.Hour)
		}
		before := h.mono
		now := c.Now()
		if now < last {
			t.Fatalf("seed %d, step %d (monotonic %v): %v after %v", seed, i, before, now, last)
		}
		last = now
	}
	// 0.1 % of the time passed is the most that all corrections can make.
	if gone, most := last.Sub(sensors.At(noon())), h.mono+h.mono/1000; gone > most || gone < h.mono-h.mono/1000-time.Millisecond {
		t.Errorf("seed %d: %v passed, the stamps say %v", seed, h.mono, gone)
	}
}

func TestClockSpeed(t *testing.T) {
	for _, speed := range []float64{1, 2.5, 60} {
		h := &hostClocks{wall: noon()}
		c := h.clock(t, speed)
		start := c.Now()
		h.pass(10 * time.Second)
		if got, want := c.Now().Sub(start), time.Duration(speed*float64(10*time.Second)); got != want {
			t.Errorf("speed %g: 10 s became %v, want %v", speed, got, want)
		}
		if got := c.Offset(); got != 0 {
			t.Errorf("speed %g: the offset is %v, but the host clock is right", speed, got)
		}
	}
	for _, speed := range []float64{0, -1, 0.5, 61} {
		if _, err := NewClockOver(time.Now, func() time.Duration { return 0 }, speed); err == nil {
			t.Errorf("speed %g is accepted", speed)
		}
	}
}

func TestClockOfTheHost(t *testing.T) {
	c := NewClock()
	before := sensors.At(time.Now())
	got := c.Now()
	// 100 ms for a host clock that is being adjusted while the test runs.
	if d := got.Sub(before); d < -100*time.Millisecond || d > 10*time.Second {
		t.Errorf("the stamp %v is %v off the host clock", got, d)
	}
	var wg sync.WaitGroup
	for range 4 {
		wg.Go(func() {
			last := c.Now()
			for range 2000 {
				now := c.Now()
				if now < last {
					t.Errorf("%v after %v", now, last)
					return
				}
				last = now
			}
		})
	}
	wg.Wait()
}

func BenchmarkClock(b *testing.B) {
	c := NewClock()
	for b.Loop() {
		c.Now()
	}
}
