package engine_test

import (
	"fmt"
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/alerting/lifecycle"
	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/feed"
)

// hostClock is the clock of a host that is stepped once; its monotonic clock
// is not.
type hostClock struct {
	start time.Time
	since time.Duration // true time since the start
	at    time.Duration // of the step
	step  time.Duration
}

func (h *hostClock) wall() time.Time {
	t := h.start.Add(h.since)
	if h.since >= h.at {
		t = t.Add(h.step)
	}
	return t
}

// stamped plays the messages past a host whose clock is stepped: each is
// stamped when it really arrives, as the daemon's clock has it then.
func stamped(t *testing.T, messages []sensors.Message, start sensors.Instant, at, step time.Duration) []sensors.Message {
	t.Helper()
	h := &hostClock{start: start.Time(), at: at, step: step}
	clock, err := feed.NewClockOver(h.wall, func() time.Duration { return h.since }, 1)
	if err != nil {
		t.Fatal(err)
	}
	out := make([]sensors.Message, len(messages))
	for i, m := range messages {
		for h.since+100*time.Millisecond < m.Received.Sub(start) {
			h.since += 100 * time.Millisecond // the daemon's own ticks
			clock.Now()
		}
		h.since = m.Received.Sub(start)
		m.Received = clock.Now()
		out[i] = m
	}
	return out
}

// story is every opening and closing of a run, without the instant.
type story struct {
	what string
	at   sensors.Instant
}

func stories(t *testing.T, a *aerodrome, messages []sensors.Message, start, end sensors.Instant) (all []story, blind int) {
	t.Helper()
	e := a.engine(t)
	seen := map[string]bool{}
	play(e, messages, start, end, func(r *engine.Result) {
		live := 0
		for i := range r.Snapshot.Len() {
			if r.Snapshot.Mast(i).State == averages.Live {
				live++
			}
		}
		if live < r.Snapshot.Len() && r.At > start.Add(time.Minute) {
			blind++
		}
		for _, tr := range r.Transitions {
			al := tr.Alert
			name := fmt.Sprintf("%s %s %s", al.Operation, al.Runway, al.Kind)
			if !seen[al.ID] {
				seen[al.ID] = true
				all = append(all, story{name + " opens", tr.At})
			}
			if al.State == lifecycle.Closed {
				all = append(all, story{fmt.Sprintf("%s closes: %s", name, al.Because), tr.At})
			}
		}
	})
	return all, blind
}

// A step of the host clock, forward or back, by a leap second or to 1970, in
// the middle of an alert or before it, opens, closes and loses no alert and no
// mast: the arrival stamps do not follow it at once, and where they are drawn
// after it over the quarter of an hour, the error that all stations then share
// is taken out.
func TestStepsOfTheHostClock(t *testing.T) {
	a, s := keptScene(t, "outflow-on-path")
	messages := a.messages(t, s)
	end := s.Start.Add(s.Length)
	want, _ := stories(t, a, messages, s.Start, end)
	if len(want) < 4 {
		t.Fatalf("the scene tells too little: %v", want)
	}
	to1970 := -s.Start.Time().Sub(time.Unix(0, 0))
	for _, step := range []time.Duration{
		time.Second, -time.Second, time.Minute, -time.Minute, time.Hour, -time.Hour, to1970,
	} {
		for _, at := range []time.Duration{time.Minute, 8 * time.Minute} {
			t.Run(fmt.Sprintf("%v after %v", step, at), func(t *testing.T) {
				if racing && (step != time.Hour || at != time.Minute) {
					t.Skip("one goroutine: one of these shows the race detector all that there is")
				}
				t.Parallel()
				got, blind := stories(t, a, stamped(t, messages, s.Start, at, step), s.Start, end)
				if blind > 0 {
					t.Errorf("in %d steps not every mast is live", blind)
				}
				if len(got) != len(want) {
					t.Fatalf("told is %v, want %v", got, want)
				}
				for i := range want {
					// 22 minutes of slewing make 1.3 s; the hold of 60 s adds a step
					// or two where a level is met at its edge.
					if got[i].what != want[i].what || got[i].at.Sub(want[i].at).Abs() > 5*time.Second {
						t.Errorf("%d: %v, want %v", i, got[i], want[i])
					}
				}
			})
		}
	}
}

// A station whose clock is 5 s off serves no ground and is told, or is
// corrected when that is asked for, after its first minutes.
func TestStationWithAWrongClock(t *testing.T) {
	for _, correct := range []bool{false, true} {
		for _, off := range []string{"ahead 5 s", "behind 5 s"} {
			a, _ := keptScene(t, "quiet")
			station := 2
			a.cfg.Stations[station].CorrectClock = correct
			id := a.cfg.Stations[station].ID
			s := a.scene(t, "clock", "airfield skerrymoor\nstart 2026-07-01T14:00:00Z\nlength 12 min\nseed 3\nwind 240 deg 10 kt\nmast "+id+" clock "+off+" from 0 s\n")
			e := a.engine(t)
			live := false
			play(e, a.messages(t, s), s.Start, s.Start.Add(s.Length), func(r *engine.Result) {
				live = r.Snapshot.Mast(station).State == averages.Live
				if r.At == s.Start.Add(10*time.Minute) && r.Snapshot.Mast(0).State != averages.Live {
					t.Errorf("%s: another station is %s", off, r.Snapshot.Mast(0).State)
				}
			})
			skew := e.Clock(station)
			if !skew.Known || !skew.Off || (skew.Applied != 0) != correct || live != correct {
				t.Errorf("%s, corrected %v: live %v, %+v", off, correct, live, skew)
			}
			if e.SharedClock() != 0 || e.Clock(0).Off {
				t.Errorf("%s: another station is blamed: %+v, shared %v", off, e.Clock(0), e.SharedClock())
			}
		}
	}
}
