package main

import (
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/contingency"
	"sockline/alerting/history"
	"sockline/alerting/review"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// did is a journal entry of what somebody did.
func did(tb testing.TB, at time.Time, what any) history.Entry {
	tb.Helper()
	e, err := history.EntryOf(sensors.At(at), what)
	if err != nil {
		tb.Fatal(err)
	}
	return e
}

// add writes entries into the journal of a history.
func add(tb testing.TB, dir string, entries ...history.Entry) {
	tb.Helper()
	store, err := history.Open(dir, history.Options{})
	if err != nil {
		tb.Fatal(err)
	}
	w, err := store.Writer(history.WriterOptions{})
	if err != nil {
		tb.Fatal(err)
	}
	for _, e := range entries {
		w.Record(e)
	}
	if err := errors.Join(w.Close(tb.Context()), store.Close()); err != nil {
		tb.Fatal(err)
	}
}

// reviewEvent holds that the report of an event has what it is for: who
// saw it when, what people wrote (and nothing of it as markup), every mast, and
// the notice; that it needs nothing else, and replaces no file. And that a
// summary counts the same event.
func reviewEvent(t *testing.T, dir string) {
	t.Helper()
	first := listed(t, dir)[0]
	opened, err := time.Parse(time.RFC3339, first["opened"].(string))
	if err != nil {
		t.Fatal(err)
	}
	id, occurrence := first["id"].(string), first["occurrence"].(string)
	near := 1500.0
	add(t, dir,
		did(t, opened.Add(12*time.Second), history.Acknowledgement{Occurrence: occurrence, Who: "A. Keeper"}),
		did(t, opened.Add(time.Minute), history.Note{Event: id, Who: "B. Mind", Text: `dust on the <script>alert(1)</script> track`}),
		did(t, opened.Add(5*time.Minute), history.PilotReport{ID: "p1", Who: "A. Keeper", At: sensors.At(opened.Add(2 * time.Minute)), Runway: first["runway"].(string),
			Operation: first["operation"].(string), Felt: "loss", Amount: 25 * quantity.Knot, FromM: &near, GoAround: true}),
	)
	out := filepath.Join(t.TempDir(), "event.html")
	succeed(t, "events", "report", "--history", dir, id, "--out", out)
	page, err := os.ReadFile(out)
	if err != nil {
		t.Fatal(err)
	}
	text := string(page)
	for _, want := range []string{"A. Keeper acknowledged at", "12 s after the opening", "dust on the &lt;script&gt;", "went around", "EXERCISE",
		"touch07", "touch25", "final07", "The headwind fell by about", "were not observed", alerting.Notice} {
		if !strings.Contains(text, want) {
			t.Errorf("the report does not hold %q", want)
		}
	}
	if strings.Contains(text, "<script") || regexp.MustCompile(`(?i)(src|href)=|url\(\s*['"]?http|@import`).MatchString(text) {
		t.Error("the report needs or runs something")
	}
	if n := strings.Count(text, "<svg"); n != 6 { // plan, two of the path, three masts
		t.Errorf("%d drawings", n)
	}
	if strings.Contains(text, "NaN") || strings.Contains(text, "Inf") {
		t.Error("a drawing holds what is no number")
	}
	for _, bad := range []struct {
		want string
		args []string
	}{
		{"not replaced", []string{"events", "report", "--history", dir, id, "--out", out}},
		{"no such event", []string{"events", "report", "--history", dir, "nothing", "--out", out + "2"}},
		{"no such file", []string{"events", "report", "--history", dir, id, "--out", filepath.Join(dir, "no", "where.html")}},
		{"journal.db", []string{"history", "summary", "--history", t.TempDir(), "--month", "2026-07"}},
		{"write a month", []string{"history", "summary", "--history", dir, "--month", "July"}},
		{"--from must lie before", []string{"history", "summary", "--history", dir, "--from", "2026-07-02T00:00:00Z", "--to", "2026-07-01T00:00:00Z"}},
	} {
		if o := call(t, bad.args...); o.code == exitDone || !strings.Contains(o.stderr, bad.want) {
			t.Errorf("%v: exit %d, %s", bad.args, o.code, o.stderr)
		}
	}
	if left, err := filepath.Glob(filepath.Join(filepath.Dir(out), ".*")); err != nil || len(left) > 0 {
		t.Errorf("left over: %v %v", left, err)
	}
	summaryOf(t, dir)
}

// summaryOf checks the summary of the month in which the event opened.
func summaryOf(t *testing.T, dir string) {
	t.Helper()
	out := filepath.Join(t.TempDir(), "month.html")
	o := succeed(t, "history", "summary", "--history", dir, "--from", "2026-07-01T00:00:00Z", "--to", "2026-07-03T00:00:00Z", "--output", "json", "--out", out)
	var u review.Summary
	if err := json.Unmarshal([]byte(o.stdout), &u); err != nil {
		t.Fatal(err)
	}
	if u.Alerts != len(listed(t, dir)) || u.Hours < 0.15 || u.Hours > 0.25 || len(u.Stations) != 3 || u.Notice != alerting.Notice {
		t.Errorf("%+v", u)
	}
	if a := u.Attention; a.Acknowledged.Value == nil || a.MedianS == nil || *a.MedianS < 12 || *a.MedianS >= 13 || a.Notes != 1 {
		t.Errorf("attention: %+v", a)
	}
	if v := u.Verified; v.Reports != 1 || v.ByLevel[0].Table != (contingency.Table{Hits: 1}) || v.Unverified != u.Alerts-1 {
		t.Errorf("verification: %+v", v)
	}
	for _, s := range u.Stations {
		if s.Share == nil || *s.Share < 0.99 || s.LongestS > 3 {
			t.Errorf("%+v", s)
		}
	}
	page, err := os.ReadFile(out)
	if err != nil {
		t.Fatal(err)
	}
	text := succeed(t, "history", "summary", "--history", dir, "--from", "2026-07-01T00:00:00Z", "--to", "2026-07-03T00:00:00Z").stdout
	for _, want := range []string{"beyond-margin", "touch25", alerting.Notice, "within"} {
		if !strings.Contains(string(page), want) {
			t.Errorf("the page of the summary does not hold %q", want)
		}
		if want != "within" && !strings.Contains(text, want) {
			t.Errorf("the text of the summary does not hold %q", want)
		}
	}
}

// listed lists the events of a history, oldest first.
func listed(tb testing.TB, dir string) []map[string]any {
	tb.Helper()
	var answer struct{ Events []map[string]any }
	if err := json.Unmarshal([]byte(succeed(tb, "events", "list", "--history", dir, "--output", "json").stdout), &answer); err != nil {
		tb.Fatal(err)
	}
	if len(answer.Events) == 0 {
		tb.Fatal("there is no event")
	}
	for i, j := 0, len(answer.Events)-1; i < j; i, j = i+1, j-1 {
		answer.Events[i], answer.Events[j] = answer.Events[j], answer.Events[i]
	}
	return answer.Events
}
