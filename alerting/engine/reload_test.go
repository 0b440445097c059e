package engine_test

import (
	"bytes"
	"runtime"
	"slices"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/engine"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/sensors"
	"sockline/sensors/averages"
)

// lasting is an outflow that stays on the landing path of 07.
const lasting = `
airfield   skerrymoor
start      2026-07-01T14:00:00Z
length     4 min
seed       5
wind       080 deg 7 kt
turbulence B
outflow    at 2000 m before 07 offset 350 m  strength 21 kt radius 900 m  starts 14 s grows 40 s holds 5 h fades 70 s
`

// reloading is a run with other configurations put in force at moments since
// the start of the scene.
type reloading struct {
	engine *engine.Engine
	closed []lifecycle.Transition // by the reloads
	told   bytes.Buffer           // everything issued, one object a line
}

// reload is one change: the airfield to take settings from, and when.
type reload struct {
	after time.Duration
	to    *aerodrome
	hold  time.Duration // 0: as configured
}

// runReloading plays the messages with the reloads between them, each at an
// arrival stamp as the daemon would do it.
func runReloading(t testing.TB, a *aerodrome, messages []sensors.Message, start, end sensors.Instant, changes []reload, see func(*engine.Result)) *reloading {
	t.Helper()
	r := &reloading{engine: a.engine(t)}
	words := a.words()
	tell := func(all []lifecycle.Transition) {
		for _, tr := range all {
			r.told.Write(append(wording.Of(tr, words).JSON(), '\n'))
		}
	}
	var held []lifecycle.Transition
	var part []sensors.Message
	from := start
	step := func(res *engine.Result) {
		tell(held)
		held = nil
		tell(res.Transitions)
		see(res)
	}
	for _, c := range append(changes, reload{after: end.Sub(start)}) {
		until := start.Add(c.after)
		k := 0
		for k < len(messages) && messages[k].Received < until {
			k++
		}
		part, messages = messages[:k], messages[k:]
		if c.to == nil { // the rest
			play(r.engine, slices.Concat(part, messages), from, end, step)
			break
		}
		// Steps that are due by then, and no more: the lateness of the last one
		// has not passed.
		play(r.engine, part, from, until.Add(-r.engine.Lateness())-1, step)
		s := c.to.settings()
		if c.hold > 0 {
			s.Hold = c.hold
		}
		next, err := engine.New(s)
		if err != nil {
			t.Fatal(err)
		}
		held = r.engine.Reload(next)
		r.closed = append(r.closed, held...)
		words, from = c.to.words(), until
	}
	return r
}

// quietly is for runs of which only the end matters.
func quietly(*engine.Result) {}

func lastingRun(t testing.TB) (a *aerodrome, messages []sensors.Message, start, end sensors.Instant) {
	t.Helper()
	a = skerry(t)
	s := a.scene(t, "lasting", lasting)
	return a, a.messages(t, s), s.Start, s.Start.Add(s.Length)
}

func skerry(t testing.TB, replaced ...string) *aerodrome {
	t.Helper()
	return loadAerodrome(t, "skerrymoor", sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC)), replaced...)
}

const (
	largeLine = `large_change      = "15 kt"         # ICAO Annex 3: a headwind or tailwind change of 15 kt or more`
	fbarLine  = `margin_fbar       = 0.10            # F-factor averaged over 1 km`
)

// lenient has levels of which the lasting outflow reaches the first only.
func lenient(t testing.TB) *aerodrome {
	t.Helper()
	return skerry(t, largeLine, `large_change = "58 kt"`+"\n"+`margin_change = "79 kt"`, fbarLine, `margin_fbar = 0.5`)
}

// TestReloadOfNothing holds that a reload of the same settings is no input at
// all: the run tells the same bytes, wherever the reloads fall.
func TestReloadOfNothing(t *testing.T) {
	a, messages, start, end := lastingRun(t)
	want := notices(t, a, messages, start, end)
	var changes []reload
	for after := 1300 * time.Millisecond; after < end.Sub(start); after += 7700 * time.Millisecond {
		changes = append(changes, reload{after, a, 20 * time.Second})
	}
	changes[0].after = 0 // the hold of notices from the start
	got := runReloading(t, a, messages, start, end, changes, quietly)
	if !bytes.Equal(got.told.Bytes(), want) || len(want) == 0 {
		t.Error(firstDifference(got.told.Bytes(), want))
	}
	if c := got.engine.Counts(); c.Withdrawn != 0 || c.Messages[0] < 200 {
		t.Errorf("%d readings withdrawn, %d messages of the first station counted", c.Withdrawn, c.Messages[0])
	}
}

// TestReloadOfLevels holds that an open alert keeps its id and is judged by
// the new levels: a level that is no longer met is given up after the hold and
// not before, one that is met now is told in the next step.
func TestReloadOfLevels(t *testing.T) {
	a, messages, start, end := lastingRun(t)
	const down, up = 90 * time.Second, 200 * time.Second
	levels := map[time.Duration]alerting.Level{} // of the loss on landing 07, after each step
	var ids []string
	var e *engine.Engine
	r := runReloading(t, a, messages, start, end, []reload{{down, lenient(t), 0}, {up, a, 0}}, func(res *engine.Result) {
		for _, tr := range res.Transitions {
			if al := tr.Alert; al.Runway == "07" && al.Operation == "landing" && al.Kind == alerting.HeadwindLoss {
				levels[res.At.Sub(start)] = al.Level
				if !slices.Contains(ids, al.ID) {
					ids = append(ids, al.ID)
				}
				if al.State == lifecycle.Closed {
					t.Errorf("closed: %s", al.Because)
				}
			}
		}
	})
	e = r.engine
	if len(ids) != 1 || len(r.closed) != 0 {
		t.Fatalf("ids %v, closed by the reload %v; want one id and none", ids, r.closed)
	}
	var changes []string
	last := alerting.NoLevel
	var fell, rose time.Duration
	for after := time.Duration(0); after <= end.Sub(start); after += time.Second {
		level, ok := levels[after]
		if !ok || level == last {
			continue
		}
		changes = append(changes, level.String()+" at "+after.String())
		switch {
		case level < last && fell == 0:
			fell = after
		case level > last && fell > 0:
			rose = after
		}
		last = level
	}
	// The steps up to 88 s are judged by the old levels: the step 89 is not due
	// at 90 s, because its lateness is 1 s. What was last met then is held 60 s.
	if fell != 88*time.Second+a.cfg.Alerts.Hold || rose != up-time.Second {
		t.Errorf("levels: %s; want a fall at 148 s and a rise at 199 s", strings.Join(changes, ", "))
	}
	if open := e.Alerts(nil); len(open) == 0 || !slices.ContainsFunc(open, func(al lifecycle.Alert) bool { return al.ID == ids[0] && al.Level == alerting.BeyondMargin }) {
		t.Errorf("open at the end: %v", open)
	}
}

// TestReloadOfMasts adds, removes, moves and reorders masts: those that are
// what they were go on in the next step, the others start cold.
func TestReloadOfMasts(t *testing.T) {
	a, messages, start, end := lastingRun(t)
	const at = 120 * time.Second
	far25 := "[[station]]\nid       = \"far25\"\nposition = [54.015790, -19.940105]\nheight   = \"10 m\"\n" +
		"topic    = \"airfield/skerrymoor/station/far25/wind\"\nformat   = \"senml+json\"\ninterval = \"1 s\"\n"
	touch25 := "[[station]]\nid       = \"touch25\"\nposition = [54.003174, -19.993126]\nheight   = \"10 m\"\n" +
		"topic    = \"airfield/skerrymoor/station/touch25/wind\"\nformat   = \"senml+json\"\ninterval = \"1 s\"\n"
	for _, row := range []struct {
		name     string
		before   *aerodrome
		after    *aerodrome
		cold     []string // in the step after the reload
		all      int
		dropped  bool
		stillRun bool // the cold ones report and are live in the end
	}{
		{"nothing but the order and a book", a, skerry(t, far25, "", "# A mast: where it stands", far25+"book = { serial = \"A 7\" }\n# A mast: where it stands"), nil, 8, false, true},
		{"another window and reach", a, skerry(t, "[history]", "[analysis]\nwindow = \"24 s\"\nreach = \"900 m\"\n[history]"), nil, 8, false, true},
		{"one removed", a, skerry(t, far25, ""), nil, 7, true, true},
		{"one added", skerry(t, touch25, ""), a, []string{"touch25"}, 8, false, true},
		{"one moved", a, skerry(t, "54.003174, -19.993126", "54.003184, -19.993126"), []string{"touch25"}, 8, true, true},
		{"one raised", a, skerry(t, touch25, strings.Replace(touch25, `"10 m"`, `"8 m"`, 1)), []string{"touch25"}, 8, true, true},
		{"one under another topic", a, skerry(t, "station/touch25/wind", "station/elsewhere/wind"), []string{"touch25"}, 8, true, false},
	} {
		t.Run(row.name, func(t *testing.T) {
			states := map[sensors.Instant]map[string]averages.State{}
			now := row.before
			r := runReloading(t, row.before, messages, start, end, []reload{{at, row.after, 0}}, func(res *engine.Result) {
				if res.Snapshot.Len() == row.all && res.At >= start.Add(at-2*time.Second) {
					now = row.after
				}
				m := map[string]averages.State{}
				for i, s := range now.cfg.Stations {
					if i < res.Snapshot.Len() {
						m[s.ID] = res.Snapshot.Mast(i).State
					}
				}
				states[res.At] = m
			})
			next := states[start.Add(at-time.Second)]
			if len(next) != row.all {
				t.Fatalf("%d masts after the reload, want %d", len(next), row.all)
			}
			for id, state := range next {
				if cold := slices.Contains(row.cold, id); cold == (state == averages.Live) {
					t.Errorf("%s is %v in the step after the reload; cold: %v", id, state, cold)
				}
			}
			for id, state := range states[end] {
				if want := row.stillRun || !slices.Contains(row.cold, id); want != (state == averages.Live) {
					t.Errorf("%s is %v in the end", id, state)
				}
			}
			c := r.engine.Counts()
			if row.dropped != (c.Withdrawn > 0) || c.Withdrawn > 4 {
				t.Errorf("%d readings withdrawn; any expected: %v", c.Withdrawn, row.dropped)
			}
			if open := r.engine.Alerts(nil); len(open) == 0 || len(r.closed) != 0 {
				t.Errorf("%d alerts open, %d closed by the reload", len(open), len(r.closed))
			}
		})
	}
}

// TestReloadWithdrawsPaths renames the runway, which takes away every path and
// puts new ones in their place: alerts on the old ones close, and new ones
// open under the new names.
func TestReloadWithdrawsPaths(t *testing.T) {
	a, messages, start, end := lastingRun(t)
	renamed := skerry(t, `designator = "07"`, `designator = "06"`, `designator = "25"`, `designator = "24"`)
	const at = 120 * time.Second
	var before []lifecycle.Transition
	var opened []string
	r := runReloading(t, a, messages, start, end, []reload{{at, renamed, 0}}, func(res *engine.Result) {
		for _, tr := range res.Transitions {
			switch al := tr.Alert; {
			case res.At.Sub(start) < at-time.Second:
				before = append(before, tr)
			case al.Runway == "07" || al.Runway == "25":
				t.Errorf("%s: issued after its path was withdrawn: %s", res.At, al.ID)
			case al.Revision == 1:
				opened = append(opened, al.Runway+" "+al.Operation)
			}
		}
	})
	open := map[string]int{}
	for _, tr := range before {
		open[tr.Alert.ID] = tr.Alert.Revision
		if tr.Alert.State == lifecycle.Closed {
			delete(open, tr.Alert.ID)
		}
	}
	if len(open) == 0 || len(r.closed) != len(open) {
		t.Fatalf("%d alerts were open, %d closed by the reload", len(open), len(r.closed))
	}
	for _, tr := range r.closed {
		al := tr.Alert
		if al.State != lifecycle.Closed || al.Because != lifecycle.PathWithdrawn || al.Revision != open[al.ID]+1 || al.Path != -1 ||
			al.Closed != start.Add(at-2*time.Second) {
			t.Errorf("closed as %+v", al)
		}
	}
	if !slices.Contains(opened, "06 landing") {
		t.Errorf("opened after the reload: %v; want a loss on landing 06 among them", opened)
	}
}

// TestReloadIsDeterministic: the same messages with the same reload between
// them give the same bytes, on one processor and on two, and whatever the
// order and the copies of the messages within a step.
func TestReloadIsDeterministic(t *testing.T) {
	a, messages, start, end := lastingRun(t)
	changes := []reload{
		{80*time.Second + 400*time.Millisecond, skerry(t, "54.003174, -19.993126", "54.003184, -19.993126"), 0},
		{150 * time.Second, lenient(t), 5 * time.Second},
	}
	want := runReloading(t, a, messages, start, end, changes, quietly).told.Bytes()
	if bytes.Count(want, []byte("\n")) < 20 {
		t.Fatalf("too little is told to prove anything:\n%s", want)
	}
	for run := range 2 {
		before := runtime.GOMAXPROCS(1 + run%2)
		got := runReloading(t, a, messages, start, end, changes, quietly).told.Bytes()
		runtime.GOMAXPROCS(before)
		if !bytes.Equal(got, want) {
			t.Fatalf("run %d: %s", run, firstDifference(got, want))
		}
	}
}

// TestReloadAmidAMeasurement: a speed that waits for its direction on another
// topic makes a reading although a reload falls between the two and gives its
// station another index.
func TestReloadAmidAMeasurement(t *testing.T) {
	start := sensors.At(time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC))
	a, b := skerry(t), skerry(t)
	st := a.cfg.Stations[1]
	st.Format, st.Topics = sensors.FormatJSON, &sensors.FieldTopics{Speed: "m/speed", Direction: "m/from"}
	st.Topic = "m/speed"
	a.cfg.Stations[1] = st
	b.cfg.Stations[1], b.cfg.Stations[3] = b.cfg.Stations[3], st
	b.cfg.Airfield.Masts[1], b.cfg.Airfield.Masts[3] = b.cfg.Airfield.Masts[3], b.cfg.Airfield.Masts[1]
	e := a.engine(t)
	e.Due(start)
	receive := func(topic, payload string, at sensors.Instant) (station, kept int) {
		t.Helper()
		station, kept, err := e.Receive(sensors.Message{Topic: topic, Payload: []byte(payload), Received: at})
		if err != nil {
			t.Fatal(err)
		}
		return station, kept
	}
	if station, kept := receive("m/speed", "5.5", start+300); station != 1 || kept != 0 {
		t.Fatalf("a speed alone: station %d, %d readings", station, kept)
	}
	next := b.engine(t)
	if closed := e.Reload(next); len(closed) != 0 {
		t.Fatalf("closed %v", closed)
	}
	if station, kept := receive("m/from", "246", start+320); station != 3 || kept != 1 {
		t.Fatalf("its direction: station %d, %d readings", station, kept)
	}
	e.Step(start)
	res := e.Step(start + sensors.Second)
	if len(res.Readings) != 1 || res.Readings[0].Station != 3 || res.Readings[0].Speed != 5.5 || res.Readings[0].From != 246 {
		t.Errorf("readings %+v", res.Readings)
	}
}
