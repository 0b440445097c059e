package main

import (
	"encoding/json"
	"os"
	"strings"
	"testing"
)

// feedsConfig is Skerry Moor with three masts of other kinds.
func feedsConfig(t *testing.T) string {
	t.Helper()
	text, err := os.ReadFile(skerrymoor)
	if err != nil {
		t.Fatal(err)
	}
	const add = `
[[station]]
id       = "slip"
position = [54.0005, -20.0005]
height   = "10 m"
topic    = "slip/wind"
format   = "senml+cbor"
interval = "1 s"

[[station]]
id       = "barn"
position = [54.0006, -20.0006]
height   = "10 m"
topics   = { speed = "barn/speed", direction = "barn/from", gust = "barn/gust" }
format   = "json"
interval = "1 s"
fields   = { speed_unit = "km/h" }

[[station]]
id       = "pier"
position = [54.0007, -20.0007]
height   = "10 m"
topic    = "pier/wind"
format   = "nmea0183"
interval = "1 s"
`
	return writeFile(t, "feeds.toml", string(text)+add)
}

// TestTryFeeds holds payloads that are no text, quantities on topics of their
// own, and the reasons where nothing comes out.
func TestTryFeeds(t *testing.T) {
	cfg := feedsConfig(t)
	// By hand after RFC 8428 section 6: [{0: "wind_speed", 1: "m/s", 2: 5}, {0: "wind_direction", 1: "deg", 2: 240}].
	const packed = "82a3006a77696e645f737065656401636d2f730205a3006e77696e645f646972656374696f6e01636465670218f0"
	file := writeFile(t, "message.bin", "$WIMWV,240.0,R,18.0,K,A*19\r\n")
	for _, row := range []struct {
		name, station string
		payloads      []string
		outcome, why  string
		speed         float64
	}{
		{"hex", "slip", []string{"hex:" + packed}, outcomeReading, "", 5},
		{"hex with colons", "slip", []string{"hex:" + packed[:2] + ":" + packed[2:4] + " " + packed[4:]}, outcomeReading, "", 5},
		{"hex, cut off", "slip", []string{"hex:" + packed[:20]}, outcomeRejected, "not CBOR", 0},
		{"JSON where CBOR is expected", "slip", []string{"[]"}, outcomeRejected, "would be \"senml+json\"", 0},
		{"a file", "pier", []string{"@" + file}, outcomeReading, "", 5},
		{"another station's name", "far07", []string{`[{"n":"slip/wind_speed","u":"m/s","v":1},{"n":"slip/wind_direction","u":"deg","v":1}]`}, outcomeRejected, "foreign-station", 0},
		{"quantities", "barn", []string{"speed:18", "direction:240"}, outcomeReading, "", 5},
		{"quantities with a gust", "barn", []string{"direction:240", "gust:36", "speed:18"}, outcomeReading, "", 5},
		{"half of them", "barn", []string{"speed:18"}, outcomeNothing, "the speed is kept", 0},
		{"a bad one among them", "barn", []string{"speed:18", "direction:720"}, outcomeRejected, "impossible", 0},
	} {
		t.Run(row.name, func(t *testing.T) {
			args := []string{"try", "--config", cfg, "--station", row.station, "--output", "json"}
			for _, p := range row.payloads {
				args = append(args, "--payload", p)
			}
			var r trialResult
			if err := json.Unmarshal([]byte(succeed(t, args...).stdout), &r); err != nil {
				t.Fatal(err)
			}
			if r.Outcome != row.outcome || !strings.Contains(r.Why, row.why) || row.why == "" && r.Why != "" {
				t.Errorf("%s because %q, want %s because of %q", r.Outcome, r.Why, row.outcome, row.why)
			}
			if row.outcome == outcomeReading && (len(r.Readings) != 1 || r.Readings[0].Speed != row.speed || r.Readings[0].Direction != 240) {
				t.Errorf("%+v", r.Readings)
			}
		})
	}
	for _, bad := range [][]string{{"--station", "barn", "--payload", "18"}, {"--station", "slip", "--payload", "hex:8"}, {"--station", "slip", "--payload", "@/there/is/no/such/file"}} {
		if o := call(t, append([]string{"try", "--config", cfg}, bad...)...); o.code == exitDone || o.stderr == "" {
			t.Errorf("%v: %+v", bad, o)
		}
	}
}

// Two messages on one command line are two results.
func TestTrySeveralMessages(t *testing.T) {
	const wind = `[{"n":"wind_speed","u":"m/s","v":4},{"n":"wind_direction","u":"deg","v":248}]`
	got := succeed(t, "try", "--config", skerrymoor, "--station", "far07", "--payload", wind, "--payload", "?", "--output", "json").stdout
	if lines := strings.Split(strings.TrimSpace(got), "\n"); len(lines) != 2 || !strings.Contains(lines[0], outcomeReading) || !strings.Contains(lines[1], outcomeRejected) {
		t.Errorf("%s", got)
	}
}
