package survey

import (
	"bytes"
	"encoding/json"
	"math"
	"regexp"
	"strings"
	"testing"

	"sockline/alerting"
	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
)

// invented are the records of a survey that nobody played: every part of the
// report has something to show.
func invented(n *Network, p Plan) []Record {
	var out []Record
	for i := range p.Episodes {
		kind := n.study(p).Kind(i)
		e := Episode{Index: i, Kind: kind, Wind: float64(i % 15), Hours: 0.25}
		if kind == synthetic.StudyEddying {
			e.Eddies = 1
		}
		if i%10 == 9 {
			e.Fault = "stuck"
		}
		for _, g := range grounds(n) {
			for _, gain := range []bool{false, true} {
				c := Case{Path: g.path, Gain: gain, Steps: make([][3]int, changeClassCount), Found: make([]uint32, confidenceCount)}
				c.Steps[0] = [3]int{900, 700, 100}
				c.Told = [][3]int{{}, {60, 30, 20}}
				c.Sure[8] = [2]int{10, 9}
				switch kind {
				case synthetic.StudyOutflow:
					c.Peak, c.PeakAll = float64(12+i%30), float64(14+i%30)
					along, beside := float64(i%40)*200-4000, float64(i%7)*100
					c.Along, c.Beside = &along, &beside
					c.Passed, c.Knows, c.First = 400, true, make([]int, zCount)
					c.First[0] = 410
					if i%4 != 0 {
						c.Opened, c.Found[3] = 440, 1<<levelCount-1
					}
				case synthetic.StudySteady, synthetic.StudyEddying:
					if (i%20 == 3 || i%20 == 19) && !gain {
						c.False, c.Cells = 1, []Cell{{Confidence: 3, Level: 15, Openings: 1}}
					}
				case synthetic.StudyFront:
				}
				e.Cases = append(e.Cases, c)
			}
		}
		if kind == synthetic.StudyFront {
			e.Arrivals = []ArrivalError{{Told: true, Off: -4}, {}}
		}
		out = append(out, Record{Episode: &e})
	}
	for i, place := range n.places(p) {
		place.Whole, place.Observed, place.Found = 20, float64(i%25), i%3 == 0
		out = append(out, Record{Place: &place})
	}
	return out
}

func inventedReport(t *testing.T) *Report {
	t.Helper()
	n, p := network(t, "skerrymoor"), Plan{Seed: ReportingSeed, Episodes: 400, GroundStep: 500}
	d, err := DesignOf(n, Anywhere(n), 2)
	if err != nil {
		t.Fatal(err)
	}
	records := invented(n, p)
	f := Tally(n, p, records, 50)
	r := &Report{Made: "2026-07-01", Version: "dev", Command: "sockline survey", Accepted: 50,
		Results: []Result{{Layout: LayoutOf(n), Design: d, Findings: f}, {Layout: LayoutOf(n), Design: d, Findings: f}}}
	c := Compare(n, n, p, records, records)
	r.Comparison = &c
	r.Finish()
	return r
}

// The findings are the sums of what was invented.
func TestTallySumsUp(t *testing.T) {
	f := inventedReport(t).Results[0].Findings
	// 160 outflows over two grounds; 12 + i%30 kt; three of four are found.
	cases, hits := 0, 0
	for _, c := range f.Detection {
		cases, hits = cases+c.Cases, hits+c.Hits
	}
	if cases != 320 {
		t.Errorf("%d losses, want 320", cases)
	}
	opened := 0
	study := network(t, "skerrymoor").study(Plan{Seed: ReportingSeed})
	for i := range 400 {
		if study.Kind(i) == synthetic.StudyOutflow && i%4 != 0 {
			opened += 2
		}
	}
	if hits != opened {
		t.Errorf("%d found, want %d", hits, opened)
	}
	near(t, "median delay", f.Delay.Median, 40, 0)
	near(t, "delay of the reference", f.Reference.Median, 10, 0)
	hours, events := 0.0, 0
	for _, w := range f.False {
		hours, events = hours+w.Both.Hours, events+w.Both.Events
	}
	// One in ten is windy with a stuck mast, and counts apart.
	near(t, "path-hours", hours, 160*2*0.25, 1e-9)
	if events != 40 { // i%20 == 3 is windy with eddies: 20 of 400, two grounds
		t.Errorf("%d false openings, want 40", events)
	}
	either := 0
	for _, w := range f.ByWind {
		either += w.Both.Events
		hours -= w.Both.Hours
	}
	if either != events || math.Abs(hours) > 1e-9 {
		t.Errorf("by wind alone: %d false openings, %g h fewer", either, hours)
	}
	for _, r := range f.Faults {
		want := Rate{}
		if r.Fault == synthetic.FaultStuck {
			want.Events, want.Hours = 40, 40*2*0.25
		}
		if r.Events != want.Events || r.Hours != want.Hours {
			t.Errorf("%s: %d in %g h, want %d in %g", r.Fault, r.Events, r.Hours, want.Events, want.Hours)
		}
	}
	if f.Windy.Events != 80 || f.Windy.Hours != 100 {
		t.Errorf("in all: %+v", f.Windy)
	}
	near(t, "coverage", f.Coverage[0].Inside, 700.0/900, 1e-12)
	near(t, "coverage by what was told", f.Told[1].Inside, 0.5, 1e-12)
	near(t, "coverage by what was told, below", f.Told[1].Below, 1.0/6, 1e-12)
	near(t, "reliability", f.Sure[8].Share.Share, 0.9, 1e-12)
	if c := f.Sure[8]; c.From != 80 || c.To != 90 || f.Sure[7].Cases != 0 {
		t.Errorf("reliability: %+v", f.Sure)
	}
	if f.Arrival.Cases != 80 || f.Arrival.Told != 40 || f.Arrival.Median != 4 {
		t.Errorf("arrivals %+v", f.Arrival)
	}
	var force *Choice
	for i := range f.Sweep {
		if f.Sweep[i].InForce {
			force = &f.Sweep[i]
		}
	}
	if force == nil || force.Level != 15 || force.Confidence != 0.8 || force.False.Hits != 40 {
		t.Fatalf("in force: %+v", force)
	}
	near(t, "false openings in force", force.Per100, 50, 1e-9)
	if f.Chosen == nil || f.Chosen.Level == 15 || f.Chosen.Confidence != 0.8 {
		t.Errorf("chosen: %+v", f.Chosen)
	}
	lines := strings.Join(f.ConfigurationLines(50), "\n")
	if !strings.Contains(lines, "large_change = \"") || !strings.Contains(lines, "confidence   = 0.8") {
		t.Errorf("configuration lines:\n%s", lines)
	}
	f.Chosen = nil
	if lines := f.ConfigurationLines(0); !strings.HasPrefix(lines[0], "# No choice") {
		t.Errorf("nothing to choose: %q", lines)
	}
}

func TestCompareNetworks(t *testing.T) {
	n, p := network(t, "skerrymoor"), Plan{Seed: ReportingSeed, Episodes: 400}
	a, b := invented(n, p), invented(n, p)
	for i := range b {
		for k := range b[i].Episode.Cases {
			if c := &b[i].Episode.Cases[k]; c.Opened == 0 && i%8 == 0 {
				c.Opened = 450
			}
		}
	}
	c := Compare(n, n, p, a, b[:390])
	if !(c.Gain > 0.05 && c.Low > 0 && c.High > c.Gain) {
		t.Errorf("finds more: %+v", c)
	}
	if words := c.Words(); !strings.Contains(words, "more of it.") {
		t.Errorf("words: %s", words)
	}
	if same := Compare(n, n, p, a, a); same.Gain != 0 || !strings.Contains(same.Words(), "chance") {
		t.Errorf("a network and itself: %+v, %s", same, same.Words())
	}
	if less := Compare(n, n, p, b, a); !strings.Contains(less.Words(), "less of it.") {
		t.Errorf("words: %s", less.Words())
	}
}

// The page needs nothing from outside, runs nothing, says that it is an
// exercise first and the notice last.
func TestHTMLIsSelfContained(t *testing.T) {
	var b bytes.Buffer
	r := inventedReport(t)
	r.Results[0].Layout.Masts[0].ID = `a<b>"&` // nothing from a configuration is markup
	r.Results[0].Findings.Partial = true
	if err := r.WriteHTML(&b); err != nil {
		t.Fatal(err)
	}
	page := b.String()
	for _, m := range regexp.MustCompile(`(?i)<script|javascript:|src=|href=|url\(|@import|<b>"`).FindAllString(page, -1) {
		t.Errorf("the page holds %q", m)
	}
	for _, m := range regexp.MustCompile(`https?://[^"]*`).FindAllString(page, -1) {
		if m != "http://www.w3.org/2000/svg" { // a name, not an address
			t.Errorf("the page refers to %s", m)
		}
	}
	for _, want := range []string{"EXERCISE", "Blind ground", "Side by side", "PARTIAL", "<svg", "large_change", "next masts"} {
		if !strings.Contains(page, want) {
			t.Errorf("the page does not hold %q", want)
		}
	}
	if strings.Contains(page, "NaN") || strings.Contains(page, "%!") || strings.Contains(page, "ZgotmplZ") {
		t.Error("the page holds something that is no figure")
	}
	first, last := strings.Index(page, "EXERCISE"), strings.LastIndex(page, alerting.Notice)
	if last < 0 || first < 0 || first > strings.Index(page, "<h1>") || strings.Contains(page[last+len(alerting.Notice):], "<p>") {
		t.Error("the page does not begin with EXERCISE and end with the notice")
	}
	if n := strings.Count(page, "<svg"); n != strings.Count(page, "</svg>") || n != strings.Count(page, `role="img"`) {
		t.Errorf("%d pictures, not all named or closed", n)
	}
}

func TestTextAndJSON(t *testing.T) {
	var b bytes.Buffer
	r := inventedReport(t)
	if err := r.WriteText(&b); err != nil {
		t.Fatal(err)
	}
	text := b.String()
	ending := strings.Join(strings.Fields(text), " ")
	if !strings.HasPrefix(text, "EXERCISE") || !strings.HasSuffix(ending, alerting.Notice) {
		t.Error("the text does not begin with EXERCISE and end with the notice")
	}
	for _, bad := range []string{"NaN", "%!", "+Inf"} {
		if strings.Contains(text, bad) {
			t.Errorf("the text holds %q", bad)
		}
	}
	for _, line := range strings.Split(text, "\n") {
		if len(line) > 130 {
			t.Errorf("a line of %d characters: %s", len(line), line)
		}
	}
	b.Reset()
	if err := r.WriteJSON(&b); err != nil {
		t.Fatal(err)
	}
	var back Report
	if err := json.Unmarshal(b.Bytes(), &back); err != nil {
		t.Fatal(err)
	}
	if back.Format != 2 || !back.Exercise || back.Notice != alerting.Notice || len(back.Results) != 2 || back.Results[0].Findings.Ground == nil {
		t.Errorf("read back: format %d, exercise %v, %d networks", back.Format, back.Exercise, len(back.Results))
	}
}

// A network without an episode has a report as well.
func TestReportWithoutEpisodes(t *testing.T) {
	n := network(t, "pellmark")
	d, err := DesignOf(n, nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	r := &Report{Results: []Result{{Layout: LayoutOf(n), Design: d}}}
	r.Finish()
	for name, write := range map[string]func(*bytes.Buffer) error{
		"text": func(b *bytes.Buffer) error { return r.WriteText(b) },
		"page": func(b *bytes.Buffer) error { return r.WriteHTML(b) },
	} {
		var b bytes.Buffer
		if err := write(&b); err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		if strings.Contains(b.String(), "Blind ground") || !strings.Contains(b.String(), "bay") {
			t.Errorf("%s:\n%s", name, b.String())
		}
	}
}

// An outflow that stays over a network is seen; beyond the reach of all masts it
// is not, and counts as outside of what is observed.
func TestPlaces(t *testing.T) {
	if racing {
		t.Skip("one goroutine plays a place")
	}
	n := network(t, "skerrymoor")
	p := newPlayer(n, Plan{Seed: 1, Episodes: 1, GroundStep: 500})
	path := n.Settings.Airfield.Paths[0]
	put := func(before, strength, radius float64) *Place {
		x, y := path.At(before)
		place, err := p.put(Place{Index: 5, X: x, Y: y, Strength: strength, Radius: radius}, 1)
		if err != nil {
			t.Fatal(err)
		}
		return &place
	}
	large := quantity.Knots(n.Settings.Levels.Large)
	if s := put(1000, 40, 1200); s.Seen(large) != SeenWell || s.Observed < 35 {
		t.Errorf("40 kt on the approach: %+v, %s", s, s.Seen(large))
	}
	if s := put(5200, 25, 700); s.Seen(large) == SeenWell || s.Seen(large) == Unseen {
		t.Errorf("25 kt beyond the last mast: %+v, %s", s, s.Seen(large))
	}
	if s := put(1000, 8, 700); s.Seen(large) != Harmless {
		t.Errorf("8 kt: %+v, %s", s, s.Seen(large))
	}
	if n := len(network(t, "skerrymoor").places(Plan{GroundStep: 500})); n < 500 || n > 900 {
		t.Errorf("%d places on a grid of 500 m", n)
	}
}
