package main

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"io"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/feed"
	"sockline/sensors/quantity"
)

// short is an outflow that comes and goes on the landing path of 07 within
// five minutes.
const short = `
airfield   skerrymoor
start      2026-07-01T14:00:00Z
length     5 min
seed       11
wind       240 deg 6 kt
turbulence C
outflow    at 2000 m before 07 strength 26 kt radius 900 m starts 60 s grows 20 s holds 50 s fades 20 s
`

// simulated is the capture of a scene over Skerry Moor.
func simulated(tb testing.TB, scene string, args ...string) string {
	tb.Helper()
	path := filepath.Join(tb.TempDir(), "capture.jsonl")
	succeed(tb, append([]string{"simulate", "--config", skerrymoor, "--scene", writeFile(tb, "test.scene", scene), "--out", path}, args...)...)
	return path
}

// readCapture reads every message of a capture, and its end.
func readCapture(tb testing.TB, path string) (messages []sensors.Message, end sensors.Instant) {
	tb.Helper()
	r, err := feed.OpenCapture(path)
	if err != nil {
		tb.Fatal(err)
	}
	defer r.Close()
	for {
		var m sensors.Message
		if err := r.Next(&m); errors.Is(err, io.EOF) {
			end, _ = r.End()
			return messages, end
		} else if err != nil {
			tb.Fatal(err)
		}
		messages = append(messages, m)
	}
}

func loadSkerryMoor(tb testing.TB) *config.Config {
	tb.Helper()
	cfg, err := config.Load(skerrymoor)
	if err != nil {
		tb.Fatal(err)
	}
	return cfg
}

// TestSimulateCapture holds what a capture of a scene is: all masts, marked,
// in order, ended; the same for the same seed and another one for another.
func TestSimulateCapture(t *testing.T) {
	path := simulated(t, short)
	messages, end := readCapture(t, path)
	if len(messages) != 8*300 {
		t.Errorf("%d messages, want 8 masts for 300 s", len(messages))
	}
	for i, m := range messages {
		if !strings.Contains(string(m.Payload), `"exercise","vb":true`) {
			t.Fatalf("message %d is not marked as an exercise: %s", i, m.Payload)
		}
		if i > 0 && m.Received < messages[i-1].Received {
			t.Fatalf("message %d arrives before the one before it", i)
		}
	}
	last := messages[len(messages)-1].Received
	if end <= last || end.Sub(last).Seconds() > 5 {
		t.Errorf("the capture ends at %s, its last message is of %s", end, last)
	}
	same, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	again, err := os.ReadFile(simulated(t, short))
	if err != nil || !bytes.Equal(same, again) {
		t.Errorf("the same scene gives another capture (%v)", err)
	}
	other, err := os.ReadFile(simulated(t, short, "--seed", "12"))
	if err != nil || bytes.Equal(same, other) {
		t.Errorf("another seed gives the same capture (%v)", err)
	}
}

// TestSimulatePacked holds that compressed captures hold the same messages.
func TestSimulatePacked(t *testing.T) {
	want, _ := readCapture(t, simulated(t, short))
	for _, ending := range []string{".gz", ".zst"} {
		path := filepath.Join(t.TempDir(), "capture.jsonl"+ending)
		succeed(t, "simulate", "--config", skerrymoor, "--scene", writeFile(t, "test.scene", short), "--out", path)
		got, _ := readCapture(t, path)
		if len(got) != len(want) || !bytes.Equal(got[len(got)-1].Payload, want[len(want)-1].Payload) {
			t.Errorf("%s: %d messages, want %d", ending, len(got), len(want))
		}
	}
}

// TestSimulateKeepsWhatIsThere holds that evidence is not written over, and
// that no half of a pair stays.
func TestSimulateKeepsWhatIsThere(t *testing.T) {
	scene := writeFile(t, "test.scene", short)
	for _, there := range []string{"", ".truth.jsonl"} {
		out := filepath.Join(t.TempDir(), "capture.jsonl")
		if err := os.WriteFile(out+there, []byte("mine"), 0o600); err != nil {
			t.Fatal(err)
		}
		o := call(t, "simulate", "--config", skerrymoor, "--scene", scene, "--out", out)
		if o.code != exitFailed || !strings.Contains(o.stderr, "move it away or choose another name") {
			t.Errorf("with %q there: exit %d, %s", "capture.jsonl"+there, o.code, o.stderr)
		}
		if kept, err := os.ReadFile(out + there); err != nil || string(kept) != "mine" {
			t.Errorf("what was there is now %q (%v)", kept, err)
		}
		files, err := os.ReadDir(filepath.Dir(out))
		if err != nil || len(files) != 1 {
			t.Errorf("%d files are left (%v)", len(files), err)
		}
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	out := filepath.Join(t.TempDir(), "capture.jsonl")
	if o := callIn(t, ctx, nil, "simulate", "--config", skerrymoor, "--scene", scene, "--out", out); o.code != exitFailed {
		t.Errorf("stopped, it exits with %d", o.code)
	}
	if files, err := os.ReadDir(filepath.Dir(out)); err != nil || len(files) != 0 {
		t.Errorf("%d files are left after a stop (%v)", len(files), err)
	}
}

// truthOf reads a truth file.
func truthOf(tb testing.TB, capture string) (truthHead, []truthLine) {
	tb.Helper()
	f, err := os.Open(capture + ".truth.jsonl")
	if err != nil {
		tb.Fatal(err)
	}
	defer f.Close()
	var head truthHead
	var lines []truthLine
	for scan := bufio.NewScanner(f); scan.Scan(); {
		if head.Truth == 0 {
			err = json.Unmarshal(scan.Bytes(), &head)
		} else {
			lines = append(lines, truthLine{})
			err = json.Unmarshal(scan.Bytes(), &lines[len(lines)-1])
		}
		if err != nil {
			tb.Fatal(err)
		}
	}
	return head, lines
}

// TestTruth compares the truth of a simple outflow with what can be said by
// hand: nothing but the wind's own mean before it, twice its strength at most
// while it stands on the path, centred on it, and opposite signs for the
// opposite flight, which meets the same ground from the other side.
func TestTruth(t *testing.T) {
	scene := strings.Replace(short, "turbulence C", "turbulence none", 1)
	head, lines := truthOf(t, simulated(t, scene))
	if head.Scene != "test" || head.Seed != 11 || !head.Exercise || head.Notice == "" || len(lines) != 300*4 {
		t.Fatalf("head %+v and %d lines, want 4 paths for 300 s", head, len(lines))
	}
	at := func(second, path int) truthLine { return lines[(second-1)*4+path] }
	if l := at(30, 0); l.Loss != (truthChange{}) || l.Gain != (truthChange{}) {
		t.Errorf("before the outflow: %+v", l)
	}
	peak := at(100, 0) // landing 07 at full strength
	if peak.At != "2026-07-01T14:01:40Z" || peak.Runway != "07" || peak.Operation != "landing" {
		t.Fatalf("the order of lines: %+v", peak)
	}
	// On its axis an outflow of 26 kt at 900 m changes the wind by 52 kt over
	// 1800 m; between points 100 m apart a little less, never more.
	if peak.Loss.Change > -51 || peak.Loss.Change < -52.01 {
		t.Errorf("the loss is %.2f kt, want about 52", -peak.Loss.Change)
	}
	if math.Abs(peak.Loss.From-2900) > 101 || math.Abs(peak.Loss.To-1100) > 101 {
		t.Errorf("the loss lies from %g to %g, want about 2900 to 1100", peak.Loss.From, peak.Loss.To)
	}
	takeoff := at(100, 3) // take-off 25 flies over the same ground
	if takeoff.Runway != "25" || takeoff.Operation != "take-off" || math.Abs(takeoff.Loss.Change-peak.Loss.Change) > 0.5 {
		t.Errorf("take-off 25 loses %+v, landing 07 %+v", takeoff.Loss, peak.Loss)
	}
}

// TestTruthAgainstBruteForce looks at every pair of points anew.
func TestTruthAgainstBruteForce(t *testing.T) {
	cfg := loadSkerryMoor(t)
	scene, err := loadScene(cfg, "gust-front")
	if err != nil {
		t.Fatal(err)
	}
	weather := scene.Weather()
	for _, l := range truthPaths(cfg) {
		for _, second := range []float64{200, 420, 600} {
			l.look(weather, second)
			loss, gain := 0.0, 0.0
			for _, from := range l.before {
				for _, to := range l.before {
					if to >= from || from-to > truthReach {
						continue
					}
					change := quantity.Knots(headwindAt(l, weather, to, second) - headwindAt(l, weather, from, second))
					loss, gain = min(loss, change), max(gain, change)
				}
			}
			if got := l.extreme(-1).Change; math.Abs(got-loss) > 0.02 {
				t.Errorf("%s at %g s: loss %g, by brute force %g", l.path.Name(), second, got, loss)
			}
			if got := l.extreme(1).Change; math.Abs(got-gain) > 0.02 {
				t.Errorf("%s at %g s: gain %g, by brute force %g", l.path.Name(), second, got, gain)
			}
		}
	}
}

// headwindAt is the headwind of a path at one place, m/s.
func headwindAt(l *truthPath, weather interface {
	Wind(x, y, z, t float64) (u, v float64)
}, before, second float64) float64 {
	x, y := l.path.At(before)
	u, v := weather.Wind(x, y, truthHeight, second)
	east, north := l.path.Direction()
	return -(u*east + v*north)
}
