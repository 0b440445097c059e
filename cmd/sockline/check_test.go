package main

import (
	"encoding/json"
	"flag"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"sockline/alerting"
)

// rewrite lets the golden files be written anew: go test ./cmd/sockline -run
// TestCheckGolden -rewrite.
var rewrite = flag.Bool("rewrite", false, "write the golden files of check anew")

// TestCheckGolden holds what check prints for every invented airfield, on a
// fixed day.
func TestCheckGolden(t *testing.T) {
	for _, airfield := range []string{"skerrymoor", "brandersea", "pellmark"} {
		for _, format := range []string{"text", "json"} {
			t.Run(airfield+" "+format, func(t *testing.T) {
				got := succeed(t, "check", "--config", "../../testdata/airfields/"+airfield+".toml", "--output", format).stdout
				golden := filepath.Join("testdata", "check-"+airfield+"."+format)
				if *rewrite {
					if err := os.WriteFile(golden, []byte(got), 0o644); err != nil {
						t.Fatal(err)
					}
				}
				want, err := os.ReadFile(golden)
				if err != nil {
					t.Fatal(err)
				}
				if got != string(want) {
					t.Errorf("%s differs:\n%s", golden, got)
				}
				if format == "text" && !strings.HasSuffix(got, "\n\n"+alerting.Notice+"\n") {
					t.Error("the text does not end with the notice")
				}
			})
		}
	}
}

// TestCheckFigures compares what check says of Skerry Moor with the values of
// its description: a runway of 1280 m on 064 degrees, observed on landing 07
// from 4010 to -1280 m, variation as the World Magnetic Model 2025 gives it.
func TestCheckFigures(t *testing.T) {
	var r checkReport
	if err := json.Unmarshal([]byte(succeed(t, "check", "--config", skerrymoor, "--output", "json").stdout), &r); err != nil {
		t.Fatal(err)
	}
	landing := r.Paths[0]
	near := func(what string, got, want, tolerance float64) {
		if math.Abs(got-want) > tolerance {
			t.Errorf("%s is %g, want %g", what, got, want)
		}
	}
	if landing.Runway != "07" || landing.Operation != "landing" || len(landing.Observed) != 1 {
		t.Fatalf("the first path is %+v", landing)
	}
	near("bearing", landing.BearingTrue, 64, 0.05)
	near("length", landing.Length, 5000+1280, 1)
	near("far end of the observed ground", landing.Observed[0][0], 4010, 1)
	near("near end of the observed ground", landing.Observed[0][1], -1280, 1)
	near("magnetic bearing", *landing.BearingMagnetic, landing.BearingTrue-*r.Variation, 0.051)
	// 15 m + s tan 3 deg, by hand: at 5 km 277 m.
	near("glide path at 5 km", landing.Glide[len(landing.Glide)-1].Height, 277.0, 0.1)
	// (1 - 1/1.3) 75 kt and 0.10 g 1000 m/(120 kt), by hand.
	near("stall margin", r.Levels.StallMargin, 17.3, 0.05)
	near("loss of F-bar", r.Levels.FBarLoss, 30.9, 0.05)
	if !r.Levels.Merged || !r.EmbeddedBroker {
		t.Errorf("levels merged %v, broker embedded %v: both are", r.Levels.Merged, r.EmbeddedBroker)
	}
}

// TestCheckWarnings holds the sentences for what an operator may not know.
func TestCheckWarnings(t *testing.T) {
	source, err := os.ReadFile(skerrymoor)
	if err != nil {
		t.Fatal(err)
	}
	const speed, position = `approach_speed         = "75 kt"`, "[53.989422, -20.033655]"
	for _, row := range []struct {
		name, old, new, want string
	}{
		{"as it is", "", "", "Levels 2 and 3 lie within 3 kt: the higher is issued. A loss of 15.0 kt or more is level 3."},
		{"built-in broker", "", "", "nobody is told when this program stops"},
		{"slow aircraft", speed, `approach_speed = "55 kt"`, "23 % of 55.0 kt, is 12.7 kt: a loss smaller than level 3 (15.0 kt) already uses it up"},
		{"a gap", position, "[53.960000, -20.033655]", `Nothing but "not observed" can be said of landing 07, even with all masts live: no mast sees`},
		{"variation off", `elevation = "42 m"`, "elevation = \"42 m\"\nmagnetic_variation = \"-9 deg\"", "away from that of the World Magnetic Model 2025"},
	} {
		t.Run(row.name, func(t *testing.T) {
			text := string(source)
			if !strings.Contains(text, row.old) {
				t.Fatalf("%q is not in the configuration", row.old)
			}
			path := writeFile(t, "airfield.toml", strings.Replace(text, row.old, row.new, 1))
			if got := succeed(t, "check", "--config", path).stdout; !strings.Contains(got, row.want) {
				t.Errorf("%q is missing in\n%s", row.want, got)
			}
		})
	}
}
