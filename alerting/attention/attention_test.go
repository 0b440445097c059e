package attention

import (
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"reflect"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/sensors"
)

// at is a moment so many seconds after the beginning.
func at(s int) sensors.Instant {
	return sensors.Instant(1_800_000_000_000) + sensors.Instant(s)*sensors.Second
}

func issue(id string, level alerting.Level, s int) Alert {
	occurrence, _, _ := strings.Cut(id, "/")
	return Alert{ID: id, Occurrence: occurrence, Runway: "07", Kind: alerting.HeadwindLoss, Level: level, Change: -float64(level),
		Open: level > alerting.NoLevel, Opened: at(0), At: at(s)}
}

// only is the one occurrence on show.
func only(t *testing.T, w *Watch) Occurrence {
	t.Helper()
	all := w.Occurrences()
	if len(all) != 1 {
		t.Fatalf("%d occurrences on show: %+v", len(all), all)
	}
	return all[0]
}

func expect(t *testing.T, w *Watch, state State, sound Sound) {
	t.Helper()
	if o := only(t, w); o.State != state || o.Sound != sound {
		t.Fatalf("%s with sound %s, want %s with %s", o.State, o.Sound, state, sound)
	}
}

func must(t *testing.T, err error) {
	t.Helper()
	if err != nil {
		t.Fatal(err)
	}
}

func TestAcknowledgeSilencesAndNeverHides(t *testing.T) {
	w := New()
	w.Issue(issue("o/1", alerting.Large, 0))
	expect(t, w, RaisedUnseen, First)
	must(t, w.Acknowledge("o", "tower", at(3)))
	must(t, w.Acknowledge("o", "another", at(4)))
	expect(t, w, RaisedSeen, Silent)
	if o := only(t, w); o.Acknowledged != (Act{"tower", at(3)}) || len(o.Alerts) != 1 {
		t.Errorf("acknowledged by %+v with %d alerts", o.Acknowledged, len(o.Alerts))
	}
	// As bad as before, on another path: nothing new to look at.
	w.Issue(issue("o/2", alerting.Large, 5))
	w.Issue(issue("o/1", alerting.Noticeable, 6))
	expect(t, w, RaisedSeen, Silent)
	w.Issue(issue("o/1", alerting.BeyondMargin, 9))
	expect(t, w, RaisedUnseen, Second)
	must(t, w.Acknowledge("o", "tower", at(10)))
	w.Issue(issue("o/1", alerting.NoLevel, 80))
	w.Issue(issue("o/2", alerting.NoLevel, 90))
	if all := w.Occurrences(); len(all) != 0 {
		t.Errorf("after its end, acknowledged: %+v", all)
	}
	if err := w.Acknowledge("o", "tower", at(91)); !errors.Is(err, ErrNoOccurrence) {
		t.Errorf("acknowledge what is gone: %v", err)
	}
}

func TestEndedUnseenStaysOnShow(t *testing.T) {
	w := New()
	w.Issue(issue("o/1", alerting.BeyondMargin, 0))
	w.Issue(issue("o/1", alerting.Noticeable, 60))
	w.Issue(issue("o/1", alerting.NoLevel, 120))
	expect(t, w, EndedUnseen, Silent)
	if o := only(t, w); o.Level != alerting.BeyondMargin || o.Ended != at(120) {
		t.Errorf("level %s, ended %s", o.Level, o.Ended)
	}
	if err := w.Shelve("o", "tower", "reason", at(900), at(130)); !errors.Is(err, ErrNotOpen) {
		t.Errorf("shelve what has ended: %v", err)
	}
	w.Step(at(120).Add(Remembered) - 1)
	expect(t, w, EndedUnseen, Silent)
	w.Step(at(120).Add(Remembered))
	if len(w.Occurrences()) != 0 {
		t.Error("it is never forgotten")
	}
	for n := range 3 * mostEnded {
		w.Issue(issue(fmt.Sprintf("p%03d/1", n), alerting.Large, n))
		w.Issue(issue(fmt.Sprintf("p%03d/1", n), alerting.NoLevel, n))
	}
	if all := w.Occurrences(); len(all) != mostEnded || all[0].Ended < at(2*mostEnded) {
		t.Errorf("%d that ended are kept", len(all))
	}
}

func TestShelving(t *testing.T) {
	w := New()
	w.Issue(issue("o/1", alerting.Noticeable, 0))
	for _, tt := range []struct {
		reason string
		until  sensors.Instant
		want   error
	}{
		{"  ", at(900), ErrNoReason}, {"r", at(10), ErrBadEnd}, {"r", at(10).Add(LongestShelving) + 1, ErrBadEnd},
		{"r", at(10).Add(LongestShelving), nil}, {"r", at(900), nil},
	} {
		if err := w.Shelve("o", "tower", tt.reason, tt.until, at(10)); !errors.Is(err, tt.want) {
			t.Errorf("shelve until %s: %v, want %v", tt.until, err, tt.want)
		}
	}
	expect(t, w, Shelved, Silent)
	if l := w.Step(at(899)); len(l) != 0 {
		t.Errorf("lifted early: %+v", l)
	}
	l := w.Step(at(900))
	if len(l) != 1 || l[0].Why != ByTime || l[0].Shelving.Who != "tower" {
		t.Errorf("lifted: %+v", l)
	}
	expect(t, w, RaisedUnseen, First)
	must(t, w.Shelve("o", "tower", "r", at(1800), at(901)))
	if l := w.Issue(issue("o/1", alerting.Large, 902)); len(l) != 1 || l[0].Why != ByEscalation {
		t.Errorf("lifted: %+v", l)
	}
	expect(t, w, RaisedUnseen, First)
	must(t, w.Shelve("o", "tower", "r", at(1800), at(903)))
	must(t, w.Unshelve("o"))
	if err := w.Unshelve("o"); !errors.Is(err, ErrNotShelved) {
		t.Errorf("lift twice: %v", err)
	}
	expect(t, w, RaisedUnseen, First)
	must(t, w.Shelve("o", "tower", "r", at(1800), at(904)))
	if l := w.Issue(issue("o/1", alerting.NoLevel, 905)); len(l) != 1 || l[0].Why != ByEnd || len(w.Occurrences()) != 0 {
		t.Errorf("lifted: %+v", l)
	}
}

func TestOtherRunwaysSoundAtTheThirdLevelOnly(t *testing.T) {
	w := New()
	w.UseRunway("25")
	w.Issue(issue("o/1", alerting.Large, 0))
	expect(t, w, RaisedUnseen, Silent)
	w.Issue(issue("o/1", alerting.BeyondMargin, 1))
	expect(t, w, RaisedUnseen, Second)
	w.Issue(issue("o/1", alerting.Large, 2))
	own := issue("o/2", alerting.Noticeable, 3)
	own.Runway = "25"
	w.Issue(own)
	expect(t, w, RaisedUnseen, First)
	w.UseRunway("")
	expect(t, w, RaisedUnseen, First)
}

// deed is one call, for a walk and for doing it again.
type deed struct {
	what   string // issue, step, acknowledge, shelve, unshelve
	alert  Alert
	id     string
	now    sensors.Instant
	until  sensors.Instant
	failed bool
}

func (d *deed) do(w *Watch) (lifted []Lifted) {
	var err error
	switch d.what {
	case "issue":
		return w.Issue(d.alert)
	case "step":
		return w.Step(d.now)
	case "acknowledge":
		err = w.Acknowledge(d.id, "who", d.now)
	case "shelve":
		err = w.Shelve(d.id, "who", "why", d.until, d.now)
	case "unshelve":
		err = w.Unshelve(d.id)
	}
	d.failed = err != nil
	return nil
}

// byDefinition is the state of an occurrence told from all that happened,
// without remembering anything on the way: the rule rather than the machine.
func byDefinition(deeds []deed, id string) (State, bool) {
	levels := make([]alerting.Level, len(deeds)) // of the occurrence after each deed
	current := map[string]alerting.Level{}
	seen, shelved, ended := -1, -1, -1 // the deed that still counts
	present := false
	for i := range deeds {
		d := &deeds[i]
		if d.what == "issue" && d.alert.Occurrence == id {
			current[d.alert.ID] = alerting.NoLevel
			if d.alert.Open {
				current[d.alert.ID] = d.alert.Level
				present = true
			}
		}
		for _, l := range current {
			levels[i] = max(levels[i], l)
		}
		mine := d.id == id && !d.failed
		switch {
		case d.what == "acknowledge" && mine && ended >= 0:
			present, ended, current = false, -1, map[string]alerting.Level{}
		case d.what == "acknowledge" && mine && seen < 0:
			seen = i
		case d.what == "shelve" && mine:
			shelved = i
		case d.what == "unshelve" && mine, d.what == "step" && shelved >= 0 && d.now >= deeds[shelved].until:
			shelved = -1
		}
		if i > 0 && levels[i] > levels[i-1] {
			seen, shelved = -1, -1
		}
		if !present {
			continue
		}
		switch {
		case levels[i] > alerting.NoLevel:
			ended = -1
		case seen >= 0 || shelved >= 0:
			present, seen, shelved, current = false, -1, -1, map[string]alerting.Level{}
		case ended < 0:
			ended = i
		}
	}
	switch {
	case !present:
		return "", false
	case ended >= 0:
		return EndedUnseen, true
	case shelved >= 0:
		return Shelved, true
	case seen >= 0:
		return RaisedSeen, true
	}
	return RaisedUnseen, true
}

// walk does random things for a while and looks at the rules after each.
func walk(t *testing.T, random *rand.Rand) {
	w := New()
	var deeds []deed
	now := 0
	opened := map[string]bool{}
	for range 5 + random.IntN(30) {
		now += random.IntN(1200)
		id := fmt.Sprint("o", random.IntN(2))
		d := deed{id: id, now: at(now)}
		switch n := random.IntN(10); {
		case n < 5:
			name := fmt.Sprint(id, "/", random.IntN(3))
			level := alerting.Level(random.IntN(4))
			if level == alerting.NoLevel && !opened[name] {
				level = alerting.Noticeable // an alert begins open
			}
			opened[name] = level > alerting.NoLevel
			d.what, d.alert = "issue", issue(name, level, now)
		case n < 6:
			d.what = "step"
		case n < 8:
			d.what = "acknowledge"
		case n < 9:
			d.what, d.until = "shelve", at(now).Add(time.Duration(random.IntN(10*3600)-600)*time.Second)
		default:
			d.what = "unshelve"
		}
		before := w.Occurrences()
		lifted := d.do(w)
		deeds = append(deeds, d)
		for _, l := range lifted {
			if l.Why == ByTime && l.Shelving.Until > at(now) || l.Shelving.Reason == "" || l.Shelving.Who == "" {
				t.Fatalf("lifted %+v at %s", l, at(now))
			}
		}
		look(t, w, deeds, before)
	}
	again := New()
	for _, d := range deeds {
		d.do(again)
	}
	if !reflect.DeepEqual(w.Occurrences(), again.Occurrences()) {
		t.Fatalf("done again it is another state: %+v\n%+v", w.Occurrences(), again.Occurrences())
	}
}

// look checks what must hold after each deed.
func look(t *testing.T, w *Watch, deeds []deed, before []Occurrence) {
	t.Helper()
	now := deeds[len(deeds)-1]
	on := map[string]Occurrence{}
	for _, o := range w.Occurrences() {
		on[o.ID] = o
		if o.Shelving != (Shelving{}) && (o.Shelving.Until.Sub(o.Shelving.At) > LongestShelving || o.Shelving.Reason == "") {
			t.Fatalf("a shelving without an end within 8 h or a reason: %+v", o)
		}
		if o.State != RaisedUnseen && o.Sound != Silent {
			t.Fatalf("a sound of what is %s", o.State)
		}
		if o.State == RaisedUnseen && o.Sound == Silent {
			t.Fatalf("nothing is heard of %+v", o)
		}
	}
	for _, o := range before {
		_, still := on[o.ID]
		if !still && o.Ended == 0 && now.what != "issue" {
			t.Fatalf("a %s hid the open occurrence %s", now.what, o.ID)
		}
		if was := on[o.ID]; still && was.Level > o.Level && o.Ended == 0 && was.Ended == 0 && was.State != RaisedUnseen {
			t.Fatalf("%s rose from %s to %s and is %s", o.ID, o.Level, was.Level, was.State)
		}
	}
	for _, id := range []string{"o0", "o1"} {
		want, there := byDefinition(deeds, id)
		got, is := on[id]
		if there != is || got.State != want {
			t.Fatalf("%s is %q, by definition %q, after %+v", id, got.State, want, deeds)
		}
	}
}

// TestRandomWalks: whatever is raised, done and undone, in whatever order, the
// states are those that the rules define.
func TestRandomWalks(t *testing.T) {
	walks := 2_000
	if os.Getenv("SOCKLINE_LONG") != "" {
		walks = 100_000
	}
	for seed := range walks {
		walk(t, rand.New(rand.NewPCG(40, uint64(seed))))
	}
}
