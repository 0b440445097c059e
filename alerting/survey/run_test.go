package survey

import (
	"context"
	"encoding/json"
	"errors"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
)

// played are the records of a plan, in order.
func played(t *testing.T, n *Network, p Plan, jobs int, done func(int) bool) []Record {
	t.Helper()
	var all []Record
	if err := Run(t.Context(), n, p, jobs, done, func(r Record) error { all = append(all, r); return nil }); err != nil {
		t.Fatal(err)
	}
	slices.SortFunc(all, func(a, b Record) int { return a.Index() - b.Index() })
	return all
}

func nothingDone(int) bool { return false }

func text(t *testing.T, v any) string {
	t.Helper()
	b, err := json.Marshal(v)
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

// The same seed gives the same records and the same findings, whatever the
// number of workers, and whether it was played at once or went on from records
// that had been written down.
func TestSameForAnyNumberOfWorkers(t *testing.T) {
	n, p := network(t, "pellmark"), Plan{Seed: 40, Episodes: 3}
	if racing {
		p.Episodes, p.brief = 2, 270*time.Second
	}
	one := played(t, n, p, 1, nothingDone)
	many := played(t, n, p, 3, nothingDone)
	if text(t, one) != text(t, many) {
		t.Fatal("three workers find something else than one")
	}
	var kept []Record
	if err := json.Unmarshal([]byte(text(t, one[:1])), &kept); err != nil {
		t.Fatal(err)
	}
	rest := played(t, n, p, 2, func(i int) bool { return i == 0 })
	if len(rest) != p.Episodes-1 {
		t.Fatalf("%d records are left of %d", len(rest), p.Episodes)
	}
	whole := append(rest, kept...) // out of order
	if a, b := text(t, Tally(n, p, one, 0.5)), text(t, Tally(n, p, whole, 0.5)); a != b {
		t.Errorf("an interrupted survey finds something else:\n%s\n%s", b, a)
	}
	if f := Tally(n, p, rest, 0.5); !f.Partial || f.Episodes != p.Episodes-1 || !f.Tuning {
		t.Errorf("%d episodes, partial %v, tuning %v", f.Episodes, f.Partial, f.Tuning)
	}
}

func TestRunEnds(t *testing.T) {
	n, p := network(t, "pellmark"), Plan{Seed: 1, Episodes: 1000, brief: 20 * time.Second}
	ctx, cancel := context.WithCancel(t.Context())
	count := 0
	err := Run(ctx, n, p, 1, func(i int) bool { return i < 995 }, func(Record) error { count++; cancel(); return nil })
	if !errors.Is(err, context.Canceled) || count < 1 || count > 3 {
		t.Errorf("interrupted: %d records, %v", count, err)
	}
	full := errors.New("disk full")
	err = Run(t.Context(), n, p, 2, func(i int) bool { return i < 997 }, func(Record) error { return full })
	if !errors.Is(err, full) {
		t.Errorf("nothing could be kept, and the survey says %v", err)
	}
}

// What makes no sense is named with a mend, before anything is played.
func TestBadPlansAndNetworks(t *testing.T) {
	good := Plan{Seed: 1, Episodes: 10}
	strip := func(keep ...int) *Network {
		n := *network(t, "skerrymoor")
		field := *n.Settings.Airfield
		masts, stations, specs := field.Masts, n.Settings.Stations, n.Specs
		field.Masts, n.Settings.Stations, n.Specs = nil, nil, nil
		for _, i := range keep {
			field.Masts = append(field.Masts, masts[i])
			n.Settings.Stations = append(n.Settings.Stations, stations[i])
			n.Specs = append(n.Specs, specs[i])
		}
		n.Settings.Airfield = &field
		return &n
	}
	line := strip(0, 1, 2, 3)
	east, north := line.Settings.Airfield.Paths[0].Direction()
	for i := range line.Settings.Airfield.Masts {
		line.Settings.Airfield.Masts[i].X, line.Settings.Airfield.Masts[i].Y = float64(1000*i)*east, float64(1000*i)*north
	}
	far := strip(0, 1, 2, 4)
	far.Settings.Airfield.Masts[2].X += 9000
	for _, row := range []struct {
		name    string
		network *Network
		plan    Plan
		phrase  string
	}{
		{"no episode", strip(0, 1, 2), Plan{Seed: 1}, "0 episodes: choose from 1"},
		{"absurdly many", strip(0, 1, 2), Plan{Seed: 1, Episodes: 1e9}, "choose from 1 to 5000000"},
		{"seed at the end", strip(0, 1, 2), Plan{Seed: 1<<64 - 5, Episodes: 10}, "no room"},
		{"step", strip(0, 1, 2), Plan{Seed: 1, Episodes: 10, GroundStep: 3}, "from 100 to 2000 m"},
		{"two masts", strip(0, 1), good, "has 2 masts: a survey needs at least 3"},
		{"one mast", strip(0), good, "has 1 mast:"},
		{"all on one line", line, good, "of one line"},
		{"a mast far away", far, good, "mast mid-north of Skerry Moor stands"},
	} {
		err := Run(t.Context(), row.network, row.plan, 1, nothingDone, func(Record) error { return nil })
		if err == nil || !strings.Contains(err.Error(), row.phrase) {
			t.Errorf("%s: error %v, want %q", row.name, err, row.phrase)
		}
	}
	if err := Run(t.Context(), strip(0, 1, 2), good, 0, nothingDone, func(Record) error { return nil }); err == nil {
		t.Error("no worker at all is taken")
	}
	if _, err := DesignOf(network(t, "skerrymoor"), nil, 2); err == nil || !strings.Contains(err.Error(), "the area is empty") {
		t.Errorf("no site to choose from: %v", err)
	}
	if _, err := DesignOf(network(t, "skerrymoor"), nil, 7); err == nil {
		t.Error("seven sites are chosen")
	}
	if err := Comparable(network(t, "skerrymoor"), network(t, "pellmark")); err == nil {
		t.Error("two airfields are compared")
	}
	if err := Comparable(network(t, "skerrymoor"), strip(0, 1, 2)); err != nil {
		t.Errorf("the same airfield with fewer masts: %v", err)
	}
}

// Far from a compact outflow hardly any wind is left of it: what the test that
// knows it makes of that is no number, and must not come into a record.
func TestReferenceFarFromItsOutflow(t *testing.T) {
	n := network(t, "pellmark")
	p := newPlayer(n, Plan{Seed: 1000, Episodes: 1})
	scene := synthetic.Still(7, synthetic.ModelHolmesOliver, 300, 200, 8, 900)
	run, err := p.begin(scene)
	if err != nil {
		t.Fatal(err)
	}
	r := newReference(n, scene, scene.Outflows[0])
	seen := false
	for {
		found, second, more := run.next()
		if !more {
			break
		}
		if second < 400 {
			continue
		}
		if z, ok := r.look(found.Snapshot, float64(second), 5e-324, n.Settings.Levels.Large); ok {
			t.Fatalf("after %d s a loss of next to nothing gives z %g", second, z)
		}
		z, ok := r.look(found.Snapshot, float64(second), 1, n.Settings.Levels.Large)
		seen = seen || ok && !math.IsNaN(z)
	}
	if !seen {
		t.Error("the test never had a number at all")
	}
}

// A strong outflow over the runway of a network that sees it is found, close to
// where the truth passes the level, by the engine and by the sweep at the levels
// in force; the test that knows size and place finds it, too.
func TestEpisodeWithAStrongOutflow(t *testing.T) {
	if racing {
		t.Skip("one goroutine plays an episode")
	}
	n := network(t, "skerrymoor")
	p := newPlayer(n, Plan{Seed: 1000, Episodes: 100})
	for i := range 100 {
		scene := p.study.Episode(i)
		if p.study.Kind(i) != synthetic.StudyOutflow || len(scene.Faults) > 0 || scene.Outflows[0].Strength < 10 {
			continue
		}
		e, err := p.play(i)
		if err != nil {
			t.Fatal(err)
		}
		for _, c := range e.Cases {
			steps, told, sure := 0, 0, 0
			for _, s := range c.Told {
				told += s[0]
			}
			for _, s := range c.Sure {
				sure += s[0]
			}
			for _, s := range c.Steps {
				steps += s[0]
				if s[1]+s[2] > s[0] {
					t.Errorf("episode %d: more steps in and above the interval than there are: %v", i, c.Steps)
				}
			}
			if steps != int((synthetic.StudyLength - synthetic.StudyWarmUp).Seconds()) {
				t.Errorf("episode %d: %d steps count", i, steps)
			}
			if told != steps || sure != steps {
				t.Errorf("episode %d: %d steps by the true loss, %d by what was told, %d by how sure", i, steps, told, sure)
			}
			if c.Peak > c.PeakAll+0.01 {
				t.Errorf("episode %d: %g kt on observed ground and %g kt on the whole path", i, c.Peak, c.PeakAll)
			}
			if c.Gain || c.Peak < 28 {
				continue
			}
			if c.Opened == 0 || c.Opened-c.Passed > 150 {
				t.Errorf("episode %d: a loss of %.0f kt passes 15 kt at %d s; level 2 at %d s", i, c.Peak, c.Passed, c.Opened)
			}
			if !foundAt(c.Found, 3, 15) {
				t.Errorf("episode %d: the sweep does not find at 15 kt and 0.8 what the engine finds", i)
			}
			if !c.Knows || c.First[0] == 0 || c.First[0]-c.Passed > 120 {
				t.Errorf("episode %d: the test that knows size and place passes its limits at %v; the loss passes 15 kt at %d s", i, c.First, c.Passed)
			}
			return
		}
	}
	t.Fatal("no strong outflow was drawn")
}

// With one level and confidence the sweep opens and closes as the rule says.
func TestSweepFollowsTheRule(t *testing.T) {
	s := sweep{hysteresis: 2 * quantity.Knot, hold: 60}
	at := func(second int, kt float64, there bool) {
		side := sideOf(kt * quantity.Knot)
		s.step(second, side, there)
	}
	const c, l = 3, 15 - leastLevel
	at(1, 14.9, false)
	if s.open[c][l] {
		t.Error("14.9 kt open a level of 15 kt")
	}
	at(2, 15.1, false)
	if !s.open[c][l] || s.falsely[c][l] != 1 || foundAt(s.found[:], c, 15) {
		t.Error("15.1 kt that are not there open nothing falsely")
	}
	at(3, 13.5, true) // within the hysteresis
	at(62, 5, true)
	if !s.open[c][l] || !foundAt(s.found[:], c, 15) {
		t.Error("it closes before the hold has passed")
	}
	at(63, 5, true)
	if s.open[c][l] {
		t.Error("it is open after the hold")
	}
	at(64, 16, false)
	if s.falsely[c][l] != 2 {
		t.Errorf("%d false openings, want 2", s.falsely[c][l])
	}
	if cells := s.cells(); openingsAt(cells, c, 15) != 2 || openingsAt(cells, c, 17) != 0 {
		t.Errorf("cells %v", cells)
	}
}

// A survey of windy weather plays nothing else, and its report has nothing of what
// was not there to be found.
func TestWindySurvey(t *testing.T) {
	n, p := network(t, "pellmark"), Plan{Seed: ReportingSeed + 20, Episodes: 4, Windy: true, brief: 270 * time.Second}
	f := Tally(n, p, played(t, n, p, 2, nothingDone), 0.5)
	kinds := map[synthetic.StudyKind]int{}
	for i := range p.Episodes {
		kinds[n.study(p).Kind(i)]++
	}
	if kinds[synthetic.StudySteady] != 2 || kinds[synthetic.StudyEddying] != 2 {
		t.Errorf("it plays %v", kinds)
	}
	if !f.WindyOnly || f.Tuning || f.Windy.Hours == 0 {
		t.Errorf("windy alone %v, tuning %v, %g path-hours", f.WindyOnly, f.Tuning, f.Windy.Hours)
	}
	design, err := DesignOf(n, nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	report := &Report{Results: []Result{{Layout: LayoutOf(n), Design: design, Findings: f}}}
	report.Finish()
	var page, lines strings.Builder
	if err := errors.Join(report.WriteHTML(&page), report.WriteText(&lines)); err != nil {
		t.Fatal(err)
	}
	for _, b := range []string{page.String(), lines.String()} {
		if !strings.Contains(b, "False openings") || strings.Contains(b, "Delay from") || strings.Contains(b, "How soon") || strings.Contains(b, "Other ") {
			t.Error("the report is not of false openings alone")
		}
	}
}

// Episodes before and after the reporting seeds are for tuning, and those that
// straddle either end.
func TestTuningSeeds(t *testing.T) {
	for _, c := range []struct {
		seed     uint64
		episodes int
		tuning   bool
	}{
		{ReportingSeed, 2000, false}, {ReportingSeed - 1, 2, true}, {TuningSeed - 2000, 2000, false},
		{TuningSeed - 2000, 2001, true}, {TuningSeed, 1, true}, {7, 1, true},
	} {
		if p := (Plan{Seed: c.seed, Episodes: c.episodes}); p.tuning() != c.tuning {
			t.Errorf("%d episodes from %d on: tuning %v", c.episodes, c.seed, p.tuning())
		}
	}
}
