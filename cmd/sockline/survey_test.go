package main

import (
	"context"
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"sockline/alerting"
	"sockline/alerting/survey"
)

func TestSurveyRefuses(t *testing.T) {
	pole := writeFile(t, "pole.txt", "12.5 -20.0\n")
	letters := writeFile(t, "letters.txt", "# sites\nnorth west\n")
	hole := writeFile(t, "hole.geojson", `{"type":"Polygon","coordinates":[[[0,0],[1,0],[1,1],[0,0]],[[0,0],[1,0],[1,1],[0,0]]]}`)
	line := writeFile(t, "line.geojson", `{"type":"LineString","coordinates":[[0,0],[1,0]]}`)
	nothing := writeFile(t, "nothing.geojson", `{"type":"FeatureCollection","features":[]}`)
	swapped := writeFile(t, "swapped.geojson", `{"type":"Point","coordinates":[54.0,-20.0]}`)
	for _, row := range []struct {
		name   string
		args   []string
		code   int
		stderr string
	}{
		{"no configuration", nil, exitUsage, "--config is missing"},
		{"fewer than no episodes", []string{"--config", skerrymoor, "--episodes", "-1"}, exitUsage, "give a number of episodes"},
		{"absurdly many", []string{"--config", skerrymoor, "--episodes", "100000000"}, exitFailed, "choose from 1 to 5000000"},
		{"no worker", []string{"--config", skerrymoor, "--jobs", "0"}, exitUsage, "from 1 to 1024"},
		{"seven masts", []string{"--config", skerrymoor, "--next", "7"}, exitUsage, "from 1 to 6"},
		{"no mast", []string{"--config", skerrymoor, "--next", "0"}, exitUsage, "from 1 to 6"},
		{"sites for nothing", []string{"--config", skerrymoor, "--sites", pole}, exitUsage, "add --next"},
		{"two reports", []string{"--config", skerrymoor, "--out", "a", "--report", "b"}, exitUsage, "either --out DIRECTORY or --report FILE"},
		{"profile", []string{"--config", skerrymoor, "--profile", "square"}, exitUsage, "choose oseguera-bowles"},
		{"acceptance", []string{"--config", skerrymoor, "--accept", "-1"}, exitUsage, "from 0 to 1000"},
		{"step", []string{"--config", skerrymoor, "--ground-step", "7"}, exitFailed, "from 100 to 2000 m"},
		{"another airfield", []string{"--config", skerrymoor, "--compare", pellmark}, exitFailed, "do not have the same runways"},
		{"sites far away", []string{"--config", skerrymoor, "--next", "1", "--sites", pole}, exitFailed, "the right way round"},
		{"swapped", []string{"--config", skerrymoor, "--next", "1", "--sites", swapped}, exitFailed, "the right way round"},
		{"no numbers", []string{"--config", skerrymoor, "--next", "1", "--sites", letters}, exitFailed, "line 2:"},
		{"a hole", []string{"--config", skerrymoor, "--next", "1", "--sites", hole}, exitFailed, "a polygon has 2 rings"},
		{"a line", []string{"--config", skerrymoor, "--next", "1", "--sites", line}, exitFailed, "draw polygons or points"},
		{"nothing allowed", []string{"--config", skerrymoor, "--next", "1", "--sites", nothing}, exitFailed, "the area is empty"},
		{"no such sites", []string{"--config", skerrymoor, "--next", "1", "--sites", "none.txt"}, exitFailed, "none.txt"},
	} {
		t.Run(row.name, func(t *testing.T) {
			o := call(t, append([]string{"survey"}, row.args...)...)
			if o.code != row.code || !strings.Contains(o.stderr, row.stderr) || o.stdout != "" {
				t.Errorf("exit %d, want %d; standard error %q, want %q in it", o.code, row.code, o.stderr, row.stderr)
			}
		})
	}
}

// Without episodes the answer is there at once: what each mast is worth, and
// where the next ones should stand, inside of what is allowed.
func TestSurveyOfSites(t *testing.T) {
	area := writeFile(t, "area.geojson", `{"type":"FeatureCollection","features":[
		{"type":"Feature","properties":{},"geometry":{"type":"Polygon","coordinates":[[[-20.03,53.99],[-20.015,53.99],[-20.015,53.998],[-20.03,53.998],[-20.03,53.99]]]}},
		{"type":"Feature","properties":{"name":"old quarry"},"geometry":{"type":"Point","coordinates":[-19.977,54.0065]}}]}`)
	o := succeed(t, "survey", "--config", skerrymoor, "--episodes", "0", "--next", "2", "--sites", area, "--output", "json")
	var r survey.Report
	if err := json.Unmarshal([]byte(o.stdout), &r); err != nil {
		t.Fatal(err)
	}
	sites := r.Results[0].Design.Sites
	if len(sites) != 2 || r.Results[0].Findings != nil || r.Notice != alerting.Notice {
		t.Fatalf("%d sites: %+v", len(sites), sites)
	}
	named := false
	for _, s := range sites {
		inside := s.Latitude > 53.99 && s.Latitude < 53.998 && s.Longitude > -20.03 && s.Longitude < -20.015
		if !inside && s.Name != "old quarry" {
			t.Errorf("a site at %g, %g is not allowed", s.Latitude, s.Longitude)
		}
		named = named || s.Name == "old quarry"
	}
	if !named {
		t.Error("the quarry is not among the two best")
	}
	list := writeFile(t, "list.txt", "53.9935, -20.0224 by the road\n54.0101 -19.9669 # beside a mast that stands\n")
	o = succeed(t, "survey", "--config", skerrymoor, "--episodes", "0", "--next", "1", "--sites", list)
	if !strings.Contains(o.stdout, "by the road") || !strings.HasPrefix(o.stdout, "EXERCISE") {
		t.Errorf("the best of two sites:\n%s", o.stdout)
	}
}

// A survey that is interrupted keeps what it has played, says so, and goes on
// from there to the very report of one that was not.
func TestSurveyGoesOn(t *testing.T) {
	if racing {
		t.Skip(checkedApart)
	}
	dir := t.TempDir()
	args := func(name string) []string {
		return []string{"survey", "--config", pellmark, "--episodes", "2", "--ground-step", "0", "--seed", "3", "--out", filepath.Join(dir, name)}
	}
	whole := succeed(t, append(args("whole"), "--jobs", "2")...)
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	o := callIn(t, ctx, strings.NewReader(""), append(args("parts"), "--jobs", "1")...)
	if o.code != exitFailed || !strings.Contains(o.stderr, "interrupted after 0 of 2 tasks") || !strings.Contains(o.stderr, "the same command goes on") ||
		!strings.Contains(o.stdout, "Partial result") {
		t.Fatalf("interrupted: exit %d, %s\n%s", o.code, o.stderr, o.stdout)
	}
	// What one task would have left, and a line that was cut off.
	state, err := os.ReadFile(filepath.Join(dir, "whole", "survey-1.state.jsonl"))
	if err != nil {
		t.Fatal(err)
	}
	lines := strings.SplitAfter(string(state), "\n")
	if len(lines) != 4 { // head, two records, nothing
		t.Fatalf("%d lines of state", len(lines))
	}
	half := filepath.Join(dir, "parts", "survey-1.state.jsonl")
	if err := os.WriteFile(half, []byte(lines[0]+lines[1]+lines[2][:40]), 0o600); err != nil {
		t.Fatal(err)
	}
	o = succeed(t, args("parts")...)
	if !strings.Contains(o.stderr, "going on after 1 of 2 tasks") {
		t.Errorf("standard error: %s", o.stderr)
	}
	if o.stdout != whole.stdout {
		t.Errorf("in two parts:\n%s\nat once:\n%s", o.stdout, whole.stdout)
	}
	for _, name := range []string{"survey.html", "survey.json"} {
		a, err1 := os.ReadFile(filepath.Join(dir, "whole", name))
		b, err2 := os.ReadFile(filepath.Join(dir, "parts", name))
		if err1 != nil || err2 != nil || string(a) != string(b) || len(a) == 0 {
			t.Errorf("%s differs: %v %v", name, err1, err2)
		}
	}
	o = call(t, append(args("parts"), "--episodes", "3")...)
	if o.code != exitFailed || !strings.Contains(o.stderr, "belongs to another plan") {
		t.Errorf("another plan: exit %d, %s", o.code, o.stderr)
	}
	if err := os.WriteFile(half, []byte("# notes\n"), 0o600); err != nil {
		t.Fatal(err)
	}
	if o = call(t, args("parts")...); o.code != exitFailed || !strings.Contains(o.stderr, "something else") {
		t.Errorf("something else in its place: exit %d, %s", o.code, o.stderr)
	}
}
