package review

import (
	"bytes"
	"encoding/json"
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

var dawn = time.Date(2026, 7, 1, 4, 0, 0, 0, time.UTC)

// open is an alert that was open for so many seconds from one moment on.
func open(path, kind string, from, seconds int, level alerting.Level) Life {
	opened := dawn.Add(time.Duration(from) * time.Second)
	closed := opened.Add(time.Duration(seconds) * time.Second)
	return Life{ID: fmt.Sprint(path, kind, from), Occurrence: fmt.Sprint(from), Runway: path, Operation: "landing", Kind: kind, Opened: opened, Closed: &closed,
		Because: "below-level", Level: level.String(), highest: level, Steps: []LevelSince{{level.String(), opened}}, PeakKt: -12}
}

func TestCompareLives(t *testing.T) {
	const loss, gain = "headwind-loss", "headwind-gain"
	recorded := []Life{
		open("07", loss, 0, 100, alerting.Large),        // stays as it is
		open("07", gain, 50, 100, alerting.Noticeable),  // vanishes
		open("25", loss, 200, 100, alerting.Large),      // opens later, lower
		open("07", loss, 400, 60, alerting.Noticeable),  // these two
		open("07", loss, 500, 60, alerting.Noticeable),  // become one
		open("25", gain, 900, 300, alerting.Noticeable), // becomes two
	}
	other := []Life{
		open("07", loss, 0, 100, alerting.Large),
		open("25", loss, 210, 80, alerting.Noticeable),
		open("07", loss, 390, 200, alerting.Noticeable),
		open("25", gain, 900, 100, alerting.Noticeable),
		open("25", gain, 1100, 50, alerting.Noticeable),
		open("25", loss, 2000, 60, alerting.Noticeable), // appears
	}
	c := Compare(recorded, other)
	if c.Same != 1 || c.Vanishes != 1 || c.Appears != 1 || c.Changes != 3 {
		t.Errorf("%d same, %d vanish, %d appear, %d change", c.Same, c.Vanishes, c.Appears, c.Changes)
	}
	var what []string
	for _, p := range c.Pairs {
		what = append(what, p.Verdict+" "+strings.Join(p.What, "; "))
	}
	want := []string{"same ", "vanishes ", "changes opens 10s later; closes 10s earlier; reaches noticeable instead of large",
		"changes 1 alert instead of 2 alerts", "changes 2 alerts instead of 1 alert", "appears "}
	if !slices.Equal(what, want) {
		t.Errorf("got  %q\nwant %q", what, want)
	}
	if c.Recorded != [4]int{6, 4, 2, 0} || c.Other != [4]int{6, 5, 1, 0} {
		t.Errorf("by level: %v %v", c.Recorded, c.Other)
	}
	var b bytes.Buffer
	if err := WriteWhatIf(&b, WhatIf{Airfield: "skerrymoor", Way: Rejudged, Comparison: c, Notes: []string{"a note"}}); err != nil {
		t.Fatal(err)
	}
	for _, part := range []string{"1 the same, 3 change, 1 appear, 1 vanish", "opens 10s later", "note: a note", alerting.Notice} {
		if !strings.Contains(b.String(), part) {
			t.Errorf("the text does not hold %q:\n%s", part, b.String())
		}
	}
	if strings.Contains(b.String(), "clear") {
		t.Error("the word is used for nothing about wind")
	}
}

func TestRepeatFindsWhatDiffers(t *testing.T) {
	issue := func(id string, revision int, change float64) ([]byte, *lifecycle.Alert) {
		o, err := json.Marshal(map[string]any{"id": id, "revision": revision, "updated": dawn.Add(time.Duration(revision) * time.Second), "change_kt": change, "exercise": true})
		if err != nil {
			t.Fatal(err)
		}
		return o, &lifecycle.Alert{ID: id, Opened: sensors.At(dawn), Updated: sensors.At(dawn)}
	}
	fill := func(changes map[string][]float64) *Issues {
		is := NewIssues()
		for _, id := range sortedKeys(changes) {
			for i, c := range changes[id] {
				o, a := issue(id, i+1, c)
				is.Take(id, o, a)
			}
		}
		return is
	}
	told := fill(map[string][]float64{"a": {1, 2, 3}, "b": {1}, "c": {1, 2}, "d": {1}})
	if r := Repeat(told, told); !r.Exact || r.Alerts != 4 || r.Issues != 7 || !told.Exercise() {
		t.Errorf("the same again: %+v", r)
	}
	r := Repeat(told, fill(map[string][]float64{"a": {1, 2.5, 3}, "b": {1, 2}, "c": {1}, "e": {1}}))
	got := map[string]string{}
	for _, d := range r.Differ {
		got[d.ID] = d.What + " at " + d.At
	}
	want := map[string]string{
		"a": "other: change_kt at issue 2 of 2026-07-01T04:00:02Z",
		"b": "more issues follow at issue 2 of 2026-07-01T04:00:02Z",
		"c": "no further issue at issue 2 of 2026-07-01T04:00:02Z",
		"d": "does not come again at issue 1 of 2026-07-01T04:00:01Z",
		"e": "was not recorded at issue 1 of 2026-07-01T04:00:01Z",
	}
	if r.Exact || len(got) != len(want) {
		t.Errorf("%+v", r)
	}
	for id, w := range want {
		if got[id] != w {
			t.Errorf("%s: %s, want %s", id, got[id], w)
		}
	}
}

// TestLoad holds the measures of load to counts that were made by hand.
func TestLoad(t *testing.T) {
	var lives []Life
	for i := range 12 { // one every 40 s, each an occurrence of its own
		lives = append(lives, open("07", "headwind-loss", 40*i, 20, alerting.Noticeable))
	}
	lives = append(lives, open("25", "headwind-gain", 1000, 5, alerting.Noticeable), // fleeting
		open("25", "headwind-gain", 1010, 15, alerting.Noticeable), open("25", "headwind-gain", 1030, 15, alerting.BeyondMargin), // three in half a minute
		open("25", "headwind-loss", 5000, 90000, alerting.Large)) // for more than a day
	from := sensors.At(dawn)
	l := LoadOf(lives, from, from.Add(48*time.Hour), 48)
	want := map[string]float64{
		"occurrences an hour, mean":       16.0 / 48,
		"most occurrences in ten minutes": 12,
		// The eleventh comes at 400 s; ten minutes after the second, at 640 s,
		// there are ten again.
		"share of the time in flood (more than 10 in ten minutes)":  240.0 / (48 * 3600),
		"chattering (three openings of one source within a minute)": 1,
		"fleeting (open for less than 10 s)":                        1,
		"standing (open for more than 24 h)":                        1,
		"share of level 3":                                          1.0 / 16,
	}
	for _, f := range l.Figures {
		if w, ok := want[f.Name]; ok {
			if f.Value == nil || *f.Value < w-1e-9 || *f.Value > w+1e-9 {
				t.Errorf("%s: %v, want %v", f.Name, figureText(f.Value), w)
			}
			delete(want, f.Name)
		}
	}
	for name := range want {
		t.Errorf("there is no figure %q", name)
	}
	if len(l.Sources) != 3 || l.Sources[0].Alerts != 12 || l.Sources[0].Name != "landing 07 headwind-loss" {
		t.Errorf("sources: %+v", l.Sources)
	}
	if nobody := LoadOf(nil, from, from.Add(time.Hour), 0); nobody.Figures[0].Value != nil || !nobody.Figures[0].Within {
		t.Errorf("nothing was judged: %+v", nobody.Figures[0])
	}
}

// TestLifeKeepsThePlaceOfItsGreatest holds that a life tells where its greatest
// change was, not where it ended.
func TestLifeKeepsThePlaceOfItsGreatest(t *testing.T) {
	lives := NewLives()
	a := lifecycle.Alert{ID: "a", State: lifecycle.Open, Level: alerting.Noticeable, Opened: sensors.At(dawn), Cause: "unresolved"}
	for i, row := range []struct {
		peak, from float64
		at         int
		level      alerting.Level
		cause      alerting.Cause
	}{{-6, 3000, 0, 1, "unresolved"}, {-12, 2000, 5, 2, "outflow"}, {-12, 500, 5, 2, "unresolved"}, {-12, 100, 5, 1, "unresolved"}} {
		a.PeakChange, a.PeakAt, a.From, a.To = row.peak, sensors.At(dawn)+sensors.Instant(row.at)*sensors.Second, row.from, row.from-500
		a.Level, a.Cause, a.Updated = row.level, row.cause, sensors.At(dawn)+sensors.Instant(5*i)*sensors.Second
		lives.Take(&a)
	}
	a.State, a.Closed, a.Because = lifecycle.Closed, sensors.At(dawn)+60*sensors.Second, lifecycle.BelowLevel
	lives.Take(&a)
	l := lives.List()[0]
	if l.FromM != 2000 || l.ToM != 1500 || l.PeakKt != -23.3 || l.Level != "large" || l.Cause != "outflow" || len(l.Steps) != 3 || l.Issues != 5 || l.Closed == nil {
		t.Errorf("%+v", l)
	}
}
