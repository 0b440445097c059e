package decode_test

import (
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/decode"
	"sockline/sensors/feed"
)

// around is the rest of a configuration, about an invented place where the
// compass points 6 degrees west.
const around = `
[airfield]
id        = "shapes"
position  = [54.0, -20.0]
elevation = "10 m"
magnetic_variation = "-6 deg"

[[runway]]
  [[runway.end]]
  designator = "09"
  threshold  = [54.0, -20.008]
  [[runway.end]]
  designator = "27"
  threshold  = [54.0, -19.992]

[broker]
url = "embedded://127.0.0.1:1883"

[alerts]
approach_speed         = "70 kt"
fastest_approach_speed = "85 kt"

`

// Payloads as masts in the field write them, each set up in at most ten lines.
// NAME.toml is the station, NAME.msg a capture of its messages, NAME.golden a
// line for each message: what must come of it, worked out by hand from the
// payload. "-" is nothing yet, "refused" the reasons.
func TestShapes(t *testing.T) {
	names, err := filepath.Glob("../../testdata/wire/shapes/*.toml")
	if err != nil || len(names) < 25 {
		t.Fatalf("%d shapes, %v; want 25", len(names), err)
	}
	for _, name := range names {
		t.Run(strings.TrimSuffix(filepath.Base(name), ".toml"), func(t *testing.T) {
			table, err := os.ReadFile(name)
			if err != nil {
				t.Fatal(err)
			}
			lines := 0
			for line := range strings.Lines(string(table)) {
				if line = strings.TrimSpace(line); line != "" && line[0] != '#' {
					lines++
				}
			}
			if lines > 10 {
				t.Errorf("set up in %d lines, at most 10", lines)
			}
			cfg, problems := config.Parse(name, []byte(around+string(table)))
			if len(problems) > 0 {
				t.Fatal(problems)
			}
			golden, err := os.ReadFile(strings.TrimSuffix(name, ".toml") + ".golden")
			if err != nil {
				t.Fatal(err)
			}
			got := shapeOf(t, cfg, strings.TrimSuffix(name, ".toml")+".msg")
			want := strings.Split(strings.TrimSpace(string(golden)), "\n")
			for i := range max(len(got), len(want)) {
				g, w := "no message", "no line"
				if i < len(got) {
					g = got[i]
				}
				if i < len(want) {
					w = want[i]
				}
				if g != w {
					t.Errorf("message %d gave\n  %s\nwant\n  %s", i+1, g, w)
				}
			}
		})
	}
}

// shapeOf decodes a capture and tells what came of each message.
func shapeOf(t *testing.T, cfg *config.Config, msg string) (lines []string) {
	t.Helper()
	d, err := decode.New(cfg.Stations[0], 0)
	if err != nil {
		t.Fatal(err)
	}
	c, err := feed.OpenCapture(msg)
	if err != nil {
		t.Fatal(err)
	}
	defer c.Close()
	for {
		var m sensors.Message
		if err := c.Next(&m); errors.Is(err, io.EOF) {
			return lines
		} else if err != nil {
			t.Fatal(err)
		}
		variation, err := cfg.Airfield.Variation(m.Received.Time())
		if err != nil {
			t.Fatal(err)
		}
		readings, err := d.Decode(nil, m, variation)
		var parts []string
		for _, r := range readings {
			s := fmt.Sprintf("%s  %.4f m/s from %.3f", r.Time.Time().Format("15:04:05.000"), r.Speed, r.From)
			if r.HasGust {
				s += fmt.Sprintf("  gust %.4f", r.Gust)
			}
			if r.Exercise {
				s += "  exercise"
			}
			parts = append(parts, s)
		}
		var all decode.Rejections
		if errors.As(err, &all) {
			reasons := "refused"
			for _, one := range all {
				reasons += " " + string(one.Reason)
			}
			parts = append(parts, reasons)
		}
		if len(parts) == 0 {
			parts = []string{"-"}
		}
		lines = append(lines, strings.Join(parts, "; "))
	}
}
