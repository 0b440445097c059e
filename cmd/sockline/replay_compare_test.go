package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"sockline/alerting/history"
	"sockline/alerting/judged"
	"sockline/alerting/page"
	"sockline/alerting/review"
	"sockline/config"
	"sockline/sensors"
)

// twice is an outflow of two strengths within a quarter of an hour, the second
// after midnight.
const twice = `
airfield   skerrymoor
start      2026-07-01T23:54:00Z
length     11 min
seed       5
wind       240 deg 6 kt
turbulence C
eddies     0.4 m/s length 1000 m time 300 s
outflow    at 1000 m before 07 strength 26 kt radius 900 m starts 60 s grows 1 min holds 1 min fades 1 min
outflow    at 800 m before 07 strength 10 kt radius 900 m starts 390 s grows 1 min holds 90 s fades 1 min
`

func whatIf(t *testing.T, args ...string) (w review.WhatIf) {
	t.Helper()
	o := succeed(t, append([]string{"replay", "--compare", "--output", "json"}, args...)...)
	if err := json.Unmarshal([]byte(o.stdout), &w); err != nil {
		t.Fatal(err)
	}
	return w
}

// TestReview looks back at one history in every way that there is.
func TestReview(t *testing.T) {
	configuration := small(t)
	dir := kept(t, configuration, twice)
	t.Run("compare", func(t *testing.T) { compareHistory(t, configuration, dir) })
	t.Run("usual levels", func(t *testing.T) { usualLevels(t, configuration, dir) })
	t.Run("storm", reviewStorm)
	t.Run("event", func(t *testing.T) { reviewEvent(t, dir) }) // last: it adds to the journal
}

// storm is a mast that fails in a strong wind: what it sees is large, but not
// beyond-margin, since its neighbours contradict it.
const storm = `
airfield   skerrymoor
start      2026-07-01T14:00:00Z
length     9 min
seed       43
wind       064 deg 36 kt
turbulence B
mast       touch25 reads 20 % at 8 min
`

// reviewStorm holds that a loss which rests on one mast is no more by other
// levels than the analysis has it, and that what was kept by an earlier version,
// without what that takes, is analysed anew.
func reviewStorm(t *testing.T) {
	// By reports every five seconds nobody can tell that it failed from one second to the
	// next: what it says is believed.
	whole, err := os.ReadFile(skerrymoor)
	if err != nil {
		t.Fatal(err)
	}
	source := strings.ReplaceAll(string(whole), `interval = "1 s"`, `interval = "5 s"`)
	configuration := writeFile(t, "rare.toml", source)
	dir := kept(t, configuration, storm)
	other := writeFile(t, "other.toml", strings.Replace(source, `noticeable_change = "10 kt"`, `noticeable_change = "9 kt"`, 1))
	fromKept := whatIf(t, "--history", dir, "--config", other)
	analysed := whatIf(t, "--history", dir, "--config", other, "--analyse")
	if fromKept.Way != review.Rejudged || analysed.Way != review.Analysed {
		t.Fatalf("judged: %s, analysed: %s", fromKept.Way, analysed.Way)
	}
	if a, b := verdicts(fromKept.Comparison), verdicts(analysed.Comparison); a != b || a == "" {
		t.Errorf("from what is kept:\n%s\nanalysed:\n%s", a, b)
	}
	if r := analysed.Comparison.Recorded; r[2] == 0 || r[3] != 0 {
		t.Errorf("alerts by their highest level: %v; there are to be large ones, and none beyond the margin", r)
	}
	if r := fromKept.Comparison.Other; r[2] == 0 || r[3] != 0 {
		t.Errorf("by other levels: %v", r)
	}
	name := filepath.Join(dir, judged.FileOf("2026-07-01"))
	old, err := os.ReadFile(filepath.Join("..", "..", "alerting", "judged", "testdata", "version1", judged.FileOf("2026-07-01")))
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(name, old, 0o600); err != nil {
		t.Fatal(err)
	}
	if again := whatIf(t, "--history", dir, "--config", other); again.Way != review.Analysed || !strings.Contains(strings.Join(again.Notes, " "), "earlier version") {
		t.Errorf("steps of version 1 were %s: %v", again.Way, again.Notes)
	}
	// A month judged by the usual levels is not analysed: it says what it lacks.
	cfg := mustLoad(t, skerrymoor)
	from := sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC))
	v, err := review.JudgeVariants(t.Context(), "skerrymoor", dir, review.Levels{Levels: levels(cfg), Hold: cfg.Alerts.Hold}, from, from.Add(24*time.Hour), nil)
	if err != nil || v.Hours == 0 || !strings.Contains(strings.Join(v.Faults, " "), "earlier version") {
		t.Errorf("a month with steps of version 1: %v %+v", err, v)
	}
}

// compareHistory holds that the configuration in force gives every issue again and
// that this is said; that other levels are judged from what is kept of each
// step, with the same outcome as the analysis, over midnight; and that other
// masts are analysed.
func compareHistory(t *testing.T, configuration, dir string) {
	t.Helper()
	same := whatIf(t, "--history", dir)
	var said bytes.Buffer
	if err := review.WriteWhatIf(&said, same); err != nil {
		t.Fatal(err)
	}
	text := said.String()
	if same.Way != review.Repeated || same.Repeat == nil || !same.Repeat.Exact || same.Repeat.Issues < 20 {
		t.Fatalf("the same configuration: %+v\n%s", same.Repeat, text)
	}
	if !strings.Contains(text, "byte for byte") || !strings.Contains(text, "this is the same program") || !strings.Contains(text, "No alert does not mean no windshear") {
		t.Errorf("it is not said: %s", text)
	}
	source, err := os.ReadFile(configuration)
	if err != nil {
		t.Fatal(err)
	}
	change := func(old, new string) string {
		if strings.Count(string(source), old) != 1 {
			t.Fatalf("%q is not once in the configuration", old)
		}
		return writeFile(t, "other.toml", strings.Replace(string(source), old, new, 1))
	}
	higher := change(`noticeable_change = "10 kt"`, `noticeable_change = "14 kt"`)
	kept := whatIf(t, "--history", dir, "--config", higher)
	if kept.Way != review.Rejudged || kept.Comparison.Vanishes+kept.Comparison.Changes == 0 || kept.Comparison.Recorded[0] != same.Comparison.Recorded[0] {
		t.Errorf("a higher level: %+v", kept)
	}
	analysed := whatIf(t, "--history", dir, "--config", higher, "--analyse")
	if analysed.Way != review.Analysed {
		t.Errorf("it was asked to be analysed: %s", analysed.Way)
	}
	// Rounding of figures apart, both ways give the same alerts.
	if a, b := verdicts(kept.Comparison), verdicts(analysed.Comparison); a != b {
		t.Errorf("from what is kept:\n%s\nanalysed:\n%s", a, b)
	}
	// From the midst of an alert to that of another: the first is none of these,
	// the second has its end.
	lives := analysed.Comparison.Pairs
	part := []string{"--history", dir, "--config", higher, "--from", lives[0].Recorded[0].Opened.Add(20 * time.Second).Format(time.RFC3339),
		"--to", lives[len(lives)-1].Recorded[0].Opened.Add(20 * time.Second).Format(time.RFC3339)}
	judgedPart := whatIf(t, part...)
	analysedPart := whatIf(t, append(part, "--analyse")...)
	if a, b := verdicts(judgedPart.Comparison), verdicts(analysedPart.Comparison); a != b || len(judgedPart.Comparison.Pairs) == 0 || len(judgedPart.Comparison.Pairs) >= len(lives) {
		t.Errorf("in part, from what is kept:\n%s\nanalysed:\n%s\nall of it:\n%s", a, b, verdicts(analysed.Comparison))
	}
	wider := writeFile(t, "wider.toml", string(source)+"\n[analysis]\nreach = \"900 m\"\n")
	other := whatIf(t, "--history", dir, "--config", wider, "--to", "2026-07-01T23:56:00Z")
	if other.Way != review.Analysed || !strings.Contains(strings.Join(other.Notes, " "), "[analysis]") {
		t.Errorf("another reach: %s %v", other.Way, other.Notes)
	}
	for _, bad := range [][]string{
		{"--capture", "x", "--compare"}, {"--history", dir, "--analyse"}, {"--history", dir, "--output", "json"},
	} {
		if o := call(t, append([]string{"replay"}, bad...)...); o.code != exitUsage {
			t.Errorf("%v: exit code %d", bad, o.code)
		}
	}
	if o := call(t, "replay", "--compare", "--history", filepath.Join(dir, "nowhere")); o.code != exitFailed {
		t.Errorf("a history that is not there: %d %s", o.code, o.stderr)
	}
}

func verdicts(c review.Comparison) string {
	var b strings.Builder
	for _, p := range c.Pairs {
		b.WriteString(p.Verdict + " " + strings.Join(p.What, "; ") + "\n")
	}
	return b.String()
}

// usualLevels checks that a month judged by the usual other levels has, by
// those in force, the alerts that were told.
func usualLevels(t *testing.T, configuration, dir string) {
	t.Helper()
	cfg, err := config.Load(configuration)
	if err != nil {
		t.Fatal(err)
	}
	cfg.History.Directory = dir
	store, err := history.ReadOnly(dir)
	if err != nil {
		t.Fatal(err)
	}
	last, _, err := store.LastStep()
	if err != nil {
		t.Fatal(err)
	}
	answer, err := otherLevels(t.Context(), store, cfg, last)
	if err != nil {
		t.Fatal(err)
	}
	var v review.Variants
	if err := json.Unmarshal(answer, &v); err != nil {
		t.Fatal(err)
	}
	told := len(listed(t, dir))
	if len(v.Variants) != 6 || !v.Variants[0].InUse || v.Variants[0].Alerts[0] != told || !v.Variants[0].Exact || len(v.Faults) > 0 || v.Hours < 0.15 {
		t.Errorf("%d alerts were told: %s", told, answer)
	}
	lower, higher := v.Variants[1], v.Variants[2]
	if lower.OpenMinutes <= v.Variants[0].OpenMinutes || higher.OpenMinutes >= v.Variants[0].OpenMinutes {
		t.Errorf("alerts stand longer by lower levels and shorter by higher ones: %s", answer)
	}
	if err := store.Close(); err != nil {
		t.Fatal(err)
	}
	cfg.History.Directory = t.TempDir() // nothing was judged there
	if store, err = history.ReadOnly(dir); err != nil {
		t.Fatal(err)
	}
	if _, err := otherLevels(t.Context(), store, cfg, last); !errors.Is(err, page.ErrNothing) {
		t.Errorf("nothing is kept: %v", err)
	}
	if err := store.Close(); err != nil {
		t.Fatal(err)
	}
}
