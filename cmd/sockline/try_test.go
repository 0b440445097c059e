package main

import (
	"encoding/json"
	"math"
	"strings"
	"testing"

	"sockline/alerting"
)

// TestTry holds what pasted messages decode to. The payloads follow RFC 8428
// section 5; the speed of 10 kn is 5.144 m/s by the definition of the knot.
func TestTry(t *testing.T) {
	const wind = `[{"bn":"far07/","bt":1782914401,"n":"wind_speed","u":"m/s","v":4.8},{"n":"wind_direction","u":"deg","v":248}]`
	for _, row := range []struct {
		name, payload, outcome, why string
		speed, direction            float64
		at                          string
	}{
		{"a wind", wind, outcomeReading, "", 4.8, 248, "2026-07-01T14:00:01.000Z"},
		{"no time: that of arrival", `[{"n":"wind_speed","u":"kn","v":10},{"n":"wind_direction","u":"deg","v":0}]`, outcomeReading, "", 5.144, 0, "2026-07-01T12:00:00.000Z"},
		{"an exercise", strings.Replace(wind, "]", `,{"n":"exercise","vb":true}]`, 1), outcomeReading, "--exercise", 4.8, 248, "2026-07-01T14:00:01.000Z"},
		{"other things", `[{"n":"temperature","u":"Cel","v":4.8}]`, outcomeNothing, "no wind", 0, 0, ""},
		{"cut off", wind[:40], outcomeRejected, "malformed", 0, 0, ""},
		{"a wrong unit", strings.Replace(wind, "m/s", "furlong", 1), outcomeRejected, "units", 0, 0, ""},
		{"empty", "", outcomeRejected, "malformed", 0, 0, ""},
	} {
		t.Run(row.name, func(t *testing.T) {
			args := []string{"try", "--config", skerrymoor, "--station", "far07", "--output", "json", "--payload"}
			o := succeed(t, append(args, row.payload)...)
			piped := callIn(t, t.Context(), strings.NewReader(row.payload), append(args, "-")...)
			if piped != o {
				t.Errorf("from standard input it is %+v, as a flag %+v", piped, o)
			}
			var r trialResult
			if err := json.Unmarshal([]byte(o.stdout), &r); err != nil {
				t.Fatal(err)
			}
			if r.Outcome != row.outcome || !strings.Contains(r.Why, row.why) || (row.why == "" && r.Why != "") {
				t.Errorf("outcome %q because %q, want %q because of %q", r.Outcome, r.Why, row.outcome, row.why)
			}
			if r.Notice != alerting.Notice {
				t.Error("the notice is missing")
			}
			if row.outcome != outcomeReading {
				if len(r.Readings) != 0 {
					t.Errorf("there are readings: %+v", r.Readings)
				}
				return
			}
			if len(r.Readings) != 1 {
				t.Fatalf("%d readings, want one", len(r.Readings))
			}
			got := r.Readings[0]
			if math.Abs(got.Speed-row.speed) > 1e-3 || got.Direction != row.direction || got.Reference != "true" || got.Time != row.at {
				t.Errorf("reading %+v", got)
			}
		})
	}
}

// TestTryText holds the sentences, and that directions of a mast that counts
// from magnetic north are turned.
func TestTryText(t *testing.T) {
	const payload = `[{"n":"wind_speed","u":"m/s","v":10},{"n":"wind_direction","u":"deg","v":90},{"n":"wind_gust","u":"m/s","v":12}]`
	got := succeed(t, "try", "--config", skerrymoor, "--station", "far07", "--payload", payload).stdout
	want := "far07: 10.0 m/s (19.4 kt) from 90 degrees true, gust 12.0 m/s (23.3 kt), measured 2026-07-01T12:00:00.000Z\n" + alerting.Notice + "\n"
	if got != want {
		t.Errorf("got %q, want %q", got, want)
	}
	got = succeed(t, "try", "--config", skerrymoor, "--station", "far07", "--payload", "?").stdout
	if !strings.HasPrefix(got, "far07: refused\n  malformed") || !strings.HasSuffix(got, alerting.Notice+"\n") {
		t.Errorf("got %q", got)
	}
}
