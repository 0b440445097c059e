package publish

import (
	"errors"
	"fmt"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"sockline/alerting"
)

// step is one thing done to a running sink.
type step struct {
	wait time.Duration // before it
	do   func(t *testing.T, r *rig)
}

func hand(id string, phase Phase, body string) func(*testing.T, *rig) {
	return func(t *testing.T, r *rig) { t.Helper(); must(t, r.Issue(issue(id, phase, body))) }
}

func down(v bool) func(*testing.T, *rig) {
	return func(_ *testing.T, r *rig) { r.broker.set(func(b *fakeBroker) { b.down = v }) }
}

// TestAlertQueue holds the queue rule: openings and closings are never
// dropped, updates replace each other, what waited over 5 s says so.
func TestAlertQueue(t *testing.T) {
	const (
		ready = ListenFor + 2*Tick // by then the sink sends
		half  = time.Second / 2
	)
	tests := []struct {
		name  string
		steps []step
		want  string
	}{
		{"at once while connected", []step{
			{ready, hand("a", Opening, "a-open")}, {time.Second, hand("a", Update, "a-up1")},
			{time.Second, hand("a", Update, "a-up2")}, {time.Second, hand("a", Closing, "a-close")},
		}, "a-open a-up1 a-up2 a-close"},
		{"updates replace each other in an outage", []step{
			{ready, hand("a", Opening, "a-open")}, {time.Second, down(true)},
			{half, hand("a", Update, "a-up1")}, {half, hand("a", Update, "a-up2")},
			{half, hand("a", Update, "a-up3")}, {0, down(false)},
		}, "a-open a-up3"},
		{"a whole life in an outage", []step{
			{ready, down(true)}, {time.Second, hand("a", Opening, "a-open")},
			{time.Second, hand("a", Update, "a-up1")}, {time.Second, hand("a", Update, "a-up2")},
			{time.Minute, hand("a", Closing, "a-close")}, {10 * time.Second, down(false)},
		}, "a-open(delayed) a-up2(delayed) a-close(delayed)"},
		{"only what waited over 5 s is delayed", []step{
			{ready, down(true)}, {0, hand("a", Opening, "a-open")},
			// The outage is so long that the sink listens again.
			{20 * time.Second, down(false)}, {3 * time.Second, hand("a", Update, "a-up")},
		}, "a-open(delayed) a-up"},
		{"two alerts in the order they were handed over", []step{
			{ready, down(true)}, {0, hand("a", Opening, "a-open")}, {0, hand("b", Opening, "b-open")},
			{0, hand("a", Update, "a-up")}, {0, hand("b", Closing, "b-close")}, {time.Second, down(false)},
		}, "a-open b-open a-up b-close"},
		{"an id that comes again after its closing", []step{
			{ready, hand("a", Opening, "a-open")}, {time.Second, hand("a", Closing, "a-close")},
			{time.Second, hand("a", Opening, "a-open2")},
		}, "a-open a-close a-open2"},
		{"before the sink may speak", []step{
			{half, hand("a", Opening, "a-open")},
		}, "a-open(delayed)"}, // it waits for the rest of the 6 s of listening
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				r := newRig(t, nil)
				for _, s := range tt.steps {
					live(r, s.wait)
					s.do(t, r)
				}
				live(r, 20*time.Second)
				got := r.broker.under("/alert")
				if payloads(got) != tt.want {
					t.Errorf("alerts sent: %s\nwant:        %s", payloads(got), tt.want)
				}
				for _, m := range got {
					if m.qos != 1 || m.retained {
						t.Errorf("%s went out with QoS %d, retained %v; want QoS 1, not retained", m.payload, m.qos, m.retained)
					}
				}
				if st := r.State(); st.Waiting != 0 || st.Issues != uint64(len(got)) {
					t.Errorf("state: %d waiting, %d sent; want 0, %d", st.Waiting, st.Issues, len(got))
				}
				r.stop()
			})
		})
	}
}

// TestNewestUpdateWhileOneIsOnItsWay: an update handed over while the one
// before it is on its way is neither lost nor sent in its place.
func TestNewestUpdateWhileOneIsOnItsWay(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, nil)
		pass(ListenFor + 2*Tick)
		r.broker.set(func(b *fakeBroker) { b.delay = time.Second })
		must(t, r.Issue(issue("a", Update, "up1")))
		pass(500 * time.Millisecond) // up1 is on its way
		must(t, r.Issue(issue("a", Update, "up2")))
		must(t, r.Issue(issue("a", Update, "up3")))
		pass(10 * time.Second)
		if got := payloads(r.broker.under("/alert")); got != "up1 up3" {
			t.Errorf("sent %q, want up1 up3", got)
		}
		r.stop()
	})
}

// TestCallerNeverWaits: with a broker that takes 3 s for everything, handing
// over takes no (virtual) time at all, and the queue stays bounded.
func TestCallerNeverWaits(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, func(o *Options) { o.MaxAlerts = 50 })
		pass(ListenFor + 2*Tick)
		r.broker.set(func(b *fakeBroker) { b.delay, b.err = 3*time.Second, errors.New("timed out") })
		start := time.Now()
		for i := range 1000 {
			id := fmt.Sprint("a", i)
			must(t, r.Issue(issue(id, Opening, "open")))
			must(t, r.Issue(issue(id, Update, "up")))
			must(t, r.Issue(issue(id, Closing, "close")))
			r.SetStatus(alerting.Observing, []byte("s"))
		}
		if d := time.Since(start); d != 0 {
			t.Errorf("the caller waited %v", d)
		}
		pass(10 * time.Second)
		st := r.State()
		if st.Waiting > 150 || st.Lost != 3*950 {
			t.Errorf("%d issues wait and %d were given up; want at most 150, and 2850", st.Waiting, st.Lost)
		}
		if st.Failed < 2 || st.Failed > 5 { // one attempt of 3 s at a time
			t.Errorf("%d attempts in 10 s, want 2 to 5", st.Failed)
		}
		if n := strings.Count(r.log.String(), "does not take"); n != 1 {
			t.Errorf("a lasting failure is %d lines in the log, want 1", n)
		}
		r.stop()
	})
}

// TestEvictionKeepsOpenAlerts: what is given up are closed alerts, whole.
func TestEvictionKeepsOpenAlerts(t *testing.T) {
	q := newQueue(3)
	now := time.Unix(0, 0)
	q.put(issue("open1", Opening, ""), now)
	q.put(issue("closed", Opening, ""), now)
	q.put(issue("closed", Closing, ""), now)
	q.put(issue("open2", Opening, ""), now)
	q.put(issue("open3", Opening, ""), now)
	var left []string
	for _, p := range q.order {
		left = append(left, p.id)
	}
	if got := strings.Join(left, " "); got != "open1 open2 open3" || q.lost != 2 {
		t.Errorf("left: %s, lost %d; want open1 open2 open3, lost 2", got, q.lost)
	}
	for w := q.next(); w != nil; w = q.next() {
		q.sent(w)
	}
	q.put(issue("open4", Opening, ""), now) // something with nothing to send goes first, and is no loss
	if q.lost != 2 || q.alerts["open4"] == nil {
		t.Errorf("lost %d, want 2; open4 queued: %v", q.lost, q.alerts["open4"] != nil)
	}
}

// TestRetained holds the spacing and the latest-value rule.
func TestRetained(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, nil)
		pass(ListenFor + 2*Tick)
		// A step each second for a minute; the path changes its state at 30.4 s.
		for i := range 240 {
			state := alerting.BelowLimits
			if i >= 121 {
				state = alerting.Raised
			}
			r.SetStatus(alerting.Observing, fmt.Append(nil, i))
			r.SetPath("07", "landing", state, fmt.Appendf(nil, "%s-%d", state, i))
			r.SetStation("far07", "live", fmt.Append(nil, i))
			pass(250 * time.Millisecond)
		}
		check := func(suffix string, every time.Duration, slack int) {
			ms := r.broker.under(suffix)
			want := int(time.Minute / every)
			if len(ms) < want-slack || len(ms) > want+slack {
				t.Errorf("%s: %d in a minute, want about %d", suffix, len(ms), want)
			}
			for i, m := range ms {
				if !m.retained {
					t.Fatalf("%s: not retained", suffix)
				}
				// The spacing is kept to a tick.
				if gap := m.after - ms[max(i-1, 0)].after; gap > every+Tick {
					t.Errorf("%s: a gap of %v, want at most %v", suffix, gap, every+Tick)
				}
			}
		}
		check("/status", StatusEvery, 2)
		check("/path/07/landing", ValueEvery, 3)
		check("/station/far07", ValueEvery, 2)
		if got := payloads(r.broker.under("/path/07/landing")); !strings.Contains(got, "raised-121") {
			t.Errorf("a new state does not go out at once: %s", got)
		}
		// A caller that falls silent makes the sink fall silent.
		before := len(r.broker.under(""))
		pass(time.Minute)
		if after := len(r.broker.under("")); after > before+3 {
			t.Errorf("the sink sent %d values by itself", after-before)
		}
		r.stop()
	})
}

// TestStartAndStop: paths are not observed first and last, then the farewell.
func TestStartAndStop(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, nil)
		r.SetPath("07", "landing", alerting.BelowLimits, []byte("below"))
		r.SetStatus(alerting.Observing, []byte("observing"))
		pass(ListenFor - Tick)
		if n := len(r.broker.under("")); n != 0 {
			t.Fatalf("%d messages while still listening", n)
		}
		pass(3 * Tick)
		must(t, r.Issue(issue("a", Opening, "open")))
		r.stop()
		got := payloads(r.broker.under(""))
		if want := "unknown below observing open unknown farewell"; got != want {
			t.Errorf("sent:  %s\nwant:  %s", got, want)
		}
		if st := r.State(); st.Mode != Stopped || st.Waiting != 0 {
			t.Errorf("state %+v, want stopped with nothing waiting", st)
		}
	})
}

// TestStopIsBounded: a broker that hangs does not keep the daemon from ending.
func TestStopIsBounded(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, nil)
		pass(ListenFor + 2*Tick)
		r.broker.set(func(b *fakeBroker) { b.delay, b.err = 3*time.Second, errors.New("timed out") })
		for i := range 100 {
			must(t, r.Issue(issue(fmt.Sprint(i), Opening, "open")))
		}
		start := time.Now()
		r.stop()
		if d := time.Since(start); d > 7*time.Second {
			t.Errorf("stopping took %v", d)
		}
		if !strings.Contains(r.log.String(), `"waiting":100`) {
			t.Errorf("what was left unsent is not in the log:\n%s", r.log)
		}
	})
}

func TestReconnectRepeatsEverythingRetained(t *testing.T) {
	for _, outage := range []time.Duration{2 * time.Second, 30 * time.Second} {
		t.Run(outage.String(), func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				r := newRig(t, nil)
				r.SetStation("far07", "live", []byte("st"))
				r.SetPath("07", "landing", alerting.BelowLimits, []byte("below"))
				r.SetStatus(alerting.Observing, []byte("observing"))
				pass(ListenFor + 2*Tick)
				r.SetStatus(alerting.Observing, []byte("observing"))
				pass(StatusEvery)
				down(true)(t, r)
				pass(outage)
				before := len(r.broker.under(""))
				down(false)(t, r)
				r.OnConnect()
				// A gap shorter than our status lives needs no listening.
				wait := 2 * Tick
				if outage > aliveFor {
					wait += ListenFor
				}
				pass(wait)
				got := payloads(r.broker.under("")[before:])
				for _, want := range []string{"st", "below", "observing"} {
					if !strings.Contains(got, want) {
						t.Errorf("%q was not sent again: %s", want, got)
					}
				}
				r.stop()
			})
		})
	}
}

// TestConnectionLostAndFoundBetweenTwoLooks: only OnConnect tells of it.
func TestConnectionLostAndFoundBetweenTwoLooks(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, nil)
		r.SetStation("far07", "live", []byte("st"))
		r.SetStatus(alerting.Observing, []byte("observing"))
		pass(ListenFor + 2*Tick)
		before := len(r.broker.under("/station/far07"))
		r.OnConnect()
		pass(2 * Tick)
		if after := len(r.broker.under("/station/far07")); after != before+1 {
			t.Errorf("a new session was told the station %d times, want once", after-before)
		}
		r.stop()
	})
}

func TestExerciseNeverReachesLiveTopics(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, nil)
		i := issue("x", Opening, "open")
		i.Exercise = true
		if err := r.Issue(i); !errors.Is(err, errExercise) {
			t.Errorf("error %v, want %v", err, errExercise)
		}
		pass(10 * time.Second)
		if n := len(r.broker.under("/alert")); n != 0 || r.State().Refused != 1 {
			t.Errorf("%d exercise alerts on a live topic, %d refused", n, r.State().Refused)
		}
		r.stop()
	})
}

func TestPrefix(t *testing.T) {
	tests := []struct {
		configured string
		exercise   bool
		want       string
	}{
		{"", false, "sockline/skerrymoor"},
		{"", true, "sockline-exercise/skerrymoor"},
		{"tower/wind", false, "tower/wind"},
		{"tower/wind", true, "sockline-exercise/skerrymoor"},
	}
	for _, tt := range tests {
		if got := Prefix(tt.configured, "skerrymoor", tt.exercise); got != tt.want {
			t.Errorf("Prefix(%q, exercise %v) = %q, want %q", tt.configured, tt.exercise, got, tt.want)
		}
	}
}

func TestOptionsAreChecked(t *testing.T) {
	tests := []struct {
		name   string
		change func(*Options)
		phrase string
	}{
		{"no prefix", func(o *Options) { o.Prefix = "" }, "use levels"},
		{"wildcard", func(o *Options) { o.Prefix = "a/#" }, "without wildcards"},
		{"slash", func(o *Options) { o.Prefix = "a/" }, "without a slash"},
		{"exercise under a live prefix", func(o *Options) { o.Exercise = true }, "sockline-exercise/<airfield> only"},
		{"live under the exercise prefix", func(o *Options) { o.Prefix = "sockline-exercise/x" }, "is for exercises"},
		{"no instance", func(o *Options) { o.Instance = "" }, "name of this instance"},
		{"no clock", func(o *Options) { o.Now = nil }, "Now and Tick"},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			o := Options{Prefix: "sockline/x", Instance: "m", Now: time.Now, Tick: make(chan time.Time),
				NotObserved: func() []Retained { return nil }, Farewell: func() []byte { return nil }}
			tt.change(&o)
			if _, err := New(&fakeBroker{}, o); err == nil || !strings.Contains(err.Error(), tt.phrase) {
				t.Errorf("error %v, want one with %q", err, tt.phrase)
			}
		})
	}
}
