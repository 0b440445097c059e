package engine_test

import (
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/sensors"
)

// BenchmarkReload is what a reload costs between two steps, when levels change
// and when a mast is moved; making the next engine is not counted, because the
// daemon does that beside its evaluation. The step after it is: with a mast
// moved it has all its gains to work out.
func BenchmarkReload(b *testing.B) {
	a, messages, start, end := lastingRun(b)
	moved := skerry(b, "54.003174, -19.993126", "54.003184, -19.993126")
	for _, row := range []struct {
		name string
		to   [2]*aerodrome
	}{{"levels", [2]*aerodrome{lenient(b), a}}, {"mast", [2]*aerodrome{moved, a}}} {
		b.Run(row.name, func(b *testing.B) {
			e := a.engine(b)
			play(e, messages, start, end, quietly)
			var worst time.Duration
			for n := 0; b.Loop(); n++ {
				b.StopTimer()
				next, err := engine.New(row.to[n%2].settings())
				if err != nil {
					b.Fatal(err)
				}
				b.StartTimer()
				begun := time.Now()
				e.Reload(next)
				e.Step(e.LastStep() + sensors.Second)
				worst = max(worst, time.Since(begun))
			}
			b.ReportMetric(float64(worst.Microseconds()), "worst-us")
		})
	}
}
