//go:build !windows

package engine_test

import (
	"fmt"
	"strings"
	"syscall"
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/sensors"
)

// weathers of the benchmark, over Skerry Moor, 8 masts at 1 Hz and 4 paths, and
// over the same with a second runway and 40 masts.
var weathers = []struct {
	name   string
	large  bool
	source string
}{
	{"calm", false, `wind 250 deg 7 kt
turbulence C`},
	{"fresh", false, `wind 240 deg 16 kt
turbulence C
eddies 0.5 m/s length 1000 m time 300 s`},
	{"gusty", false, `wind 240 deg 25 kt
turbulence B`},
	{"outflow", false, `wind 240 deg 8 kt
turbulence C
eddies 0.4 m/s length 1000 m time 300 s
outflow at 2000 m before 07 offset 100 m strength 18 kt radius 900 m starts 13 min grows 4 min holds 12 min fades 4 min moves toward 070 deg 1 m/s`},
	{"40-calm", true, `wind 250 deg 7 kt
turbulence C`},
	{"40-fresh", true, `wind 240 deg 16 kt
turbulence C
eddies 0.5 m/s length 1000 m time 300 s`},
}

// large is Skerry Moor with a second runway, so that there are 8 paths, and 32
// more masts in four rows.
func large(b *testing.B) *aerodrome {
	const broker = "[broker]\n"
	more := strings.Builder{}
	more.WriteString(`[[runway]]
width = "18 m"
  [[runway.end]]
  designator = "16"
  threshold  = [54.0055, -20.0030]
  elevation  = "41 m"
  [[runway.end]]
  designator = "34"
  threshold  = [53.9955, -19.9970]
  elevation  = "43 m"
`)
	for row := range 4 {
		for k := range 8 {
			id := fmt.Sprintf("more%d%d", row, k)
			fmt.Fprintf(&more, `[[station]]
id       = %q
position = [%.6f, %.6f]
height   = "10 m"
topic    = "airfield/skerrymoor/station/%s/wind"
format   = "senml+json"
interval = "1 s"
`, id, 53.9801+0.0131*float64(row), -20.0353+0.0103*float64(k), id)
		}
	}
	return skerry(b, broker, more.String()+broker)
}

// BenchmarkStep is one step of the whole chain with everything on, over
// half an hour of weather of which the first third is not counted: by then
// nearly every step finds its gains. us/step is the step alone, us/second that
// and taking in the second's messages, cpu-us/second its processor time, which a
// busy machine disturbs less; worst-us is the longest step.
func BenchmarkStep(b *testing.B) {
	small := skerry(b)
	large := large(b)
	for _, w := range weathers {
		b.Run(w.name, func(b *testing.B) {
			a := small
			if w.large {
				a = large
			}
			source := strings.Join([]string{
				"title bench", "airfield skerrymoor", "start 2026-07-01T19:00:00Z", "length 30 min", "seed 7300001", w.source,
			}, "\n")
			s := a.scene(b, w.name, source)
			messages := a.messages(b, s)
			start := s.Start
			var took, all, used, worst time.Duration
			steps := 0
			for b.Loop() {
				e := a.engine(b)
				begun, busy := time.Now(), processorTime(b)
				settled := start.Add(s.Length / 3)
				playTimed(e, messages, start, start.Add(s.Length), func(t sensors.Instant, d time.Duration) {
					if t == settled {
						begun, busy = time.Now(), processorTime(b)
					}
					if t > settled {
						took += d
						worst = max(worst, d)
						steps++
					}
				})
				all += time.Since(begun)
				used += processorTime(b) - busy
			}
			b.ReportMetric(float64(took.Nanoseconds())/1000/float64(steps), "us/step")
			b.ReportMetric(float64(all.Nanoseconds())/1000/float64(steps), "us/second")
			b.ReportMetric(float64(used.Nanoseconds())/1000/float64(steps), "cpu-us/second")
			b.ReportMetric(float64(worst.Microseconds()), "worst-us")
		})
	}
}

// playTimed is play, and tells how long each step took.
func playTimed(e *engine.Engine, messages []sensors.Message, start, end sensors.Instant, tell func(sensors.Instant, time.Duration)) {
	until := func(now sensors.Instant) {
		for {
			next, due := e.Due(now)
			if !due || next > end {
				return
			}
			begun := time.Now()
			e.Step(next)
			tell(next, time.Since(begun))
		}
	}
	until(start)
	for _, m := range messages {
		until(m.Received)
		_, _, _ = e.Receive(m) // as play does
	}
	until(end.Add(e.Lateness()) + 1)
}

func processorTime(b *testing.B) time.Duration {
	var u syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
		b.Fatal(err)
	}
	return time.Duration(u.Utime.Nano() + u.Stime.Nano())
}
