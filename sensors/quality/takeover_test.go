package quality

import (
	"math/rand/v2"
	"testing"
	"time"
)

// TestClocksTakeOver: what is known of a clock goes on under another index,
// and what is taken out of its times with it, unless it is to be corrected no
// more; a station that takes nothing over begins anew.
func TestClocksTakeOver(t *testing.T) {
	before := clocksOf(3, 3)
	minutes(before, rand.New(rand.NewPCG(4, 4)), 0, 12, func(station, _ int) time.Duration {
		return []time.Duration{0, 5 * time.Second, 5 * time.Second}[station]
	})
	if s := before.Skew(1); !s.Off || s.Applied < 4*time.Second {
		t.Fatalf("the clock is not corrected before: %+v", s)
	}
	after := clocksOf(3, 1) // only the first is corrected
	after.TakeShared(before)
	after.TakeOver(0, before, 1)
	after.TakeOver(1, before, 2)
	if got, want := after.Skew(0), before.Skew(1); got != want {
		t.Errorf("under another index %+v, want %+v", got, want)
	}
	if s := after.Skew(1); !s.Known || s.Applied != after.Shared() {
		t.Errorf("not to be corrected any more: %+v", s)
	}
	if s := after.Skew(2); s.Known || s.Applied != after.Shared() {
		t.Errorf("begun anew: %+v", s)
	}
	// Both go on as if there had been no change.
	ahead := func(int, int) time.Duration { return 5 * time.Second }
	minutes(after, rand.New(rand.NewPCG(5, 5)), 12, 13, ahead)
	if s := after.Skew(0); s.Applied != before.Skew(1).Applied {
		t.Errorf("a minute later %+v", s)
	}
	if len(before.masts[1].minutes) != 10 { // of twelve, ten are kept
		t.Errorf("the watch before has %d minutes: it was changed by what came after", len(before.masts[1].minutes))
	}
}
