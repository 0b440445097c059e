package engine_test

import (
	"bytes"
	"cmp"
	"math/rand/v2"
	"runtime"
	"slices"
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/sensors"
	"sockline/sensors/synthetic"
)

// stormy opens, changes and closes alerts within two minutes, from a cold
// start, with faults on the way. Its hold is short so that it can.
const stormy = `
airfield   skerrymoor
start      2026-07-01T14:00:00Z
length     150 s
seed       41
wind       240 deg 8 kt
turbulence B
eddies     0.4 m/s length 1000 m time 300 s
outflow    at 2000 m before 07 strength 24 kt radius 900 m starts 30 s grows 20 s holds 20 s fades 20 s
masts      drop 1 %
mast mid-south dies from 50 s until 70 s
mast touch25 spikes 20 kt on 1 %
mast mid-north turned 20 deg from 60 s
`

// notices are the alert objects of a run, one a line.
func notices(t testing.TB, a *aerodrome, messages []sensors.Message, start, end sensors.Instant) []byte {
	t.Helper()
	e := a.hastyEngine(t)
	c := a.words()
	var out bytes.Buffer
	play(e, messages, start, end, func(r *engine.Result) {
		for _, tr := range r.Transitions {
			out.Write(wording.Of(tr, c).JSON())
			out.WriteByte('\n')
		}
	})
	return out.Bytes()
}

// hastyEngine gives a level up after 20 s, so that runs can be short.
func (a *aerodrome) hastyEngine(t testing.TB) *engine.Engine {
	t.Helper()
	s := a.settings()
	s.Hold = 20 * time.Second
	e, err := engine.New(s)
	if err != nil {
		t.Fatal(err)
	}
	return e
}

func stormyRun(t testing.TB) (a *aerodrome, s *synthetic.Scene, messages []sensors.Message, want []byte) {
	t.Helper()
	a = loadAerodrome(t, "skerrymoor", sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC)))
	s = a.scene(t, "stormy", stormy)
	messages = a.messages(t, s)
	want = notices(t, a, messages, s.Start, s.Start.Add(s.Length))
	if n := bytes.Count(want, []byte(`"state":"closed"`)); n < 2 || bytes.Count(want, []byte("\n")) < 30 {
		t.Fatalf("the run is too dull to prove anything:\n%s", want)
	}
	return a, s, messages, want
}

// Twenty runs give the same bytes, on one processor and on two.
func TestSameInputSameOutput(t *testing.T) {
	a, s, messages, want := stormyRun(t)
	before := runtime.GOMAXPROCS(0)
	defer runtime.GOMAXPROCS(before)
	for run := range 20 {
		runtime.GOMAXPROCS(1 + run%2)
		if got := notices(t, a, messages, s.Start, s.Start.Add(s.Length)); !bytes.Equal(got, want) {
			t.Fatalf("run %d differs: %s", run, firstDifference(got, want))
		}
	}
}

// Messages that come in another order, later or earlier by up to the lateness,
// and up to five times, change nothing.
func TestOrderAndCopiesDoNotMatter(t *testing.T) {
	a, s, messages, want := stormyRun(t)
	lateness := a.cfg.Analysis.Lateness
	for seed := range uint64(4) {
		shuffled := shuffle(t, a, messages, lateness, seed)
		if len(shuffled) < 2*len(messages) {
			t.Fatalf("seed %d: %d messages of %d are too few copies", seed, len(shuffled), len(messages))
		}
		if got := notices(t, a, shuffled, s.Start, s.Start.Add(s.Length)); !bytes.Equal(got, want) {
			t.Errorf("seed %d: the alerts differ: %s", seed, firstDifference(got, want))
		}
	}
}

// shuffle gives each message one to five new arrivals within the lateness of
// its event time, in order of arrival.
func shuffle(t *testing.T, a *aerodrome, messages []sensors.Message, lateness time.Duration, seed uint64) []sensors.Message {
	t.Helper()
	rng := rand.New(rand.NewPCG(seed, 7))
	measured := eventTimes(t, a, messages)
	var out []sensors.Message
	for i, m := range messages {
		for range 1 + rng.IntN(5) {
			c := m
			span := 2*lateness.Milliseconds() + 1
			c.Received = measured[i].Add(-lateness) + sensors.Instant(rng.Int64N(span))
			out = append(out, c)
		}
	}
	rng.Shuffle(len(out), func(i, j int) { out[i], out[j] = out[j], out[i] })
	slices.SortStableFunc(out, func(x, y sensors.Message) int { return cmp.Compare(x.Received, y.Received) })
	return out
}

// eventTimes is when each message was measured: whole seconds here, the last
// one before its arrival.
func eventTimes(t *testing.T, a *aerodrome, messages []sensors.Message) []sensors.Instant {
	t.Helper()
	times := make([]sensors.Instant, len(messages))
	for i, m := range messages {
		times[i] = m.Received.FloorSecond()
	}
	for _, st := range a.cfg.Stations {
		if st.Interval != time.Second || st.Format != sensors.FormatSenMLJSON {
			t.Fatalf("station %s does not send its time each second; this test reckons with it", st.ID)
		}
	}
	return times
}

// What comes after its step has closed is refused and counted, and changes
// nothing that was told.
func TestLateReadingsChangeNothing(t *testing.T) {
	a, s, messages, want := stormyRun(t)
	late := slices.Clone(messages)
	for _, m := range messages {
		// A copy with its own event time that arrives 1 ms after the step is
		// closed.
		m.Received = m.Received.FloorSecond().Add(a.cfg.Analysis.Lateness) + 1
		late = append(late, m)
	}
	slices.SortStableFunc(late, func(x, y sensors.Message) int { return cmp.Compare(x.Received, y.Received) })
	e := a.hastyEngine(t)
	var got bytes.Buffer
	refused := 0
	play(e, late, s.Start, s.Start.Add(s.Length), func(r *engine.Result) {
		refused += len(r.Refused)
		for _, tr := range r.Transitions {
			got.Write(wording.Of(tr, a.words()).JSON())
			got.WriteByte('\n')
		}
	})
	if !bytes.Equal(got.Bytes(), want) {
		t.Errorf("the alerts differ: %s", firstDifference(got.Bytes(), want))
	}
	// The copies of the very last seconds arrive after the last step.
	if least := len(messages) - 3*len(a.cfg.Stations); refused < least || refused > len(messages) {
		t.Errorf("%d readings were refused as late, %d came late", refused, len(messages))
	}
}

func firstDifference(got, want []byte) string {
	g, w := bytes.Split(got, []byte("\n")), bytes.Split(want, []byte("\n"))
	for i := range min(len(g), len(w)) {
		if !bytes.Equal(g[i], w[i]) {
			return "\n got " + string(g[i]) + "\nwant " + string(w[i])
		}
	}
	return "one run has more alert objects than the other"
}

// Other airfields hold the same rules: plain JSON every two seconds at one,
// sentences without a time, magnetic directions, two runways and a two-level
// mast at the other.
func TestRulesHoldElsewhere(t *testing.T) {
	tests := []struct{ airfield, runway, scene string }{
		{"pellmark", "09", `
airfield pellmark
start    2026-03-01T03:00:00Z
length   8 min
wind     080 deg 10 kt
turbulence B
outflow  at 200 m before 09 strength 26 kt radius 700 m starts 90 s grows 60 s holds 2 min fades 60 s
mast     slip dies at 5 min
`},
		{"brandersea", "22", `
airfield brandersea
start    2026-03-01T12:00:00Z
length   5 min
wind     300 deg 12 kt
turbulence B
outflow  at 1200 m before 22 strength 26 kt radius 900 m starts 60 s grows 40 s holds 60 s fades 40 s
masts    drop 5 % delay 100 ms to 1500 ms
`},
	}
	for _, test := range tests {
		t.Run(test.airfield, func(t *testing.T) {
			a := loadAerodrome(t, test.airfield, sensors.At(time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC)))
			s := a.scene(t, test.airfield, test.scene)
			e := a.engine(t)
			r := newRecorder(t, a, e)
			play(e, a.messages(t, s), s.Start, s.Start.Add(s.Length), r.see)
			opened := 0
			for _, m := range r.moments {
				for _, tr := range m.issues {
					if tr.Alert.Revision == 1 && tr.Alert.State == lifecycle.Open && tr.Alert.Runway == test.runway {
						opened++
					}
				}
			}
			if opened == 0 {
				t.Errorf("an outflow of 26 kt opened no alert on runway %s%s", test.runway, r.story(s, synthetic.Expectation{}))
			}
		})
	}
}
