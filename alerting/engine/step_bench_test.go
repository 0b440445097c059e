package engine_test

import (
	"strings"
	"syscall"
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/sensors"
)

// weathers of the benchmark, over Skerry Moor: 8 masts at 1 Hz and 4 paths.
var weathers = []struct{ name, source string }{
	{"calm", `wind 250 deg 7 kt
turbulence C`},
	{"fresh", `wind 240 deg 16 kt
turbulence C
eddies 0.5 m/s length 1000 m time 300 s`},
	{"gusty", `wind 240 deg 25 kt
turbulence B`},
	{"outflow", `wind 240 deg 8 kt
turbulence C
eddies 0.4 m/s length 1000 m time 300 s
outflow at 2000 m before 07 offset 100 m strength 18 kt radius 900 m starts 13 min grows 4 min holds 12 min fades 4 min moves toward 070 deg 1 m/s`},
}

// BenchmarkStep is one step of the whole chain with everything on, over
// half an hour of weather of which the first third is not counted: by then
// nearly every step finds its gains. us/step is the step alone, us/second that
// and taking in the second's messages, cpu-us/second its processor time, which a
// busy machine disturbs less; worst-us is the longest step.
func BenchmarkStep(b *testing.B) {
	for _, w := range weathers {
		b.Run(w.name, func(b *testing.B) {
			a := loadAerodrome(b, "skerrymoor", sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC)))
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
