package engine_test

import (
	"bytes"
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/sensors"
	"sockline/sensors/synthetic"
)

// long has alerts open at several of the moments at which the test below
// begins anew, and different weather in the two hours before each.
const long = `
airfield   skerrymoor
start      2026-07-01T12:00:00Z
length     132 min
seed       52
wind       240 deg 9 kt
turbulence B
eddies     0.5 m/s length 1000 m time 300 s
outflow    at 2000 m before 07 strength 24 kt radius 900 m starts 10 min grows 2 min holds 5 min fades 2 min
rise       from 240 deg 12 kt starts 40 min grows 5 min holds 20 min fades 5 min
outflow    at 1600 m before 25 strength 24 kt radius 900 m starts 118 min grows 2 min holds 8 min fades 2 min
mast far25 dies from 122 min until 126 min
mast final25 dies from 122 min until 126 min
mast mid-south sticks from 100 min until 110 min
`

// step is what one second brought.
type step struct {
	at       sensors.Instant
	readings []sensors.Reading
	told     []byte
	open     []lifecycle.Alert // after it
}

// runStored steps e from first to last with these readings, as read back from
// the history, and gives each step's alert objects.
func runStored(e *engine.Engine, c wording.Context, first, last int, steps []step, before func(k int)) [][]byte {
	told := make([][]byte, len(steps))
	for k := first; k <= last; k++ {
		before(k)
		for _, r := range steps[k].readings {
			e.Stored(r)
		}
		told[k] = objects(e.Step(steps[k].at), c)
	}
	return told
}

func objects(r *engine.Result, c wording.Context) []byte {
	var out bytes.Buffer
	for _, tr := range r.Transitions {
		out.Write(wording.Of(tr, c).JSON())
		out.WriteByte('\n')
	}
	return out.Bytes()
}

// Nothing that is older than two hours decides, but the open alerts: an engine
// that began two hours before T, and was then given the alerts that were open,
// tells from T on exactly what the one tells that ran all the while.
func TestNothingOlderThanItsMemoryDecides(t *testing.T) {
	// Short paths: what is remembered does not depend on their length either.
	const short = "\n  landing_length = \"2400 m\"\n  takeoff_length = \"2400 m\"\n"
	a := loadAerodrome(t, "skerrymoor", sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC)),
		`elevation  = "43 m"`, `elevation  = "43 m"`+short,
		`landing_length   = "5 km"`, `landing_length   = "2400 m"`, `takeoff_length   = "5 km"`, `takeoff_length   = "2400 m"`)
	s := a.scene(t, "long", long)
	steps := sampled(t, a, s)
	whole := a.thinEngine(t)
	for k := range steps {
		for _, r := range steps[k].readings {
			whole.Stored(r)
		}
		steps[k].told = objects(whole.Step(steps[k].at), a.words())
		steps[k].open = whole.Alerts(nil)
	}
	memory := int(engine.Memory / time.Second)
	withAlerts := 0
	// Begin while an alert grows and while its ground is out of sight; under the
	// race detector, which has nothing to find here, only the latter.
	minutes := []int{121, 125}
	if racing {
		minutes = minutes[1:]
	}
	for _, minute := range minutes {
		at := minute*60 + 17 // not on a whole minute, where the estimates are renewed
		open := steps[at].open
		if len(open) > 0 && (minute != 125 || !open[0].Observed) {
			withAlerts++
		}
		again := a.thinEngine(t)
		told := runStored(again, a.words(), at-memory, len(steps)-1, steps, func(k int) {
			if k == at-5 { // as lifecycle.Machine.Restore asks
				again.Restore(open, steps[at].at)
			}
		})
		for k := at + 1; k < len(steps); k++ {
			if !bytes.Equal(told[k], steps[k].told) {
				t.Errorf("begun for minute %d with %d open alerts, the step at %v differs: %s",
					minute, len(open), steps[k].at, firstDifference(told[k], steps[k].told))
				break
			}
		}
	}
	if withAlerts < len(minutes) {
		t.Errorf("only %d of %d starts had an open alert", withAlerts, len(minutes))
	}
}

// thinEngine tries few outflows: what is remembered does not depend on how
// many there are, and the runs are long.
func (a *aerodrome) thinEngine(t testing.TB) *engine.Engine {
	t.Helper()
	s := a.settings()
	s.Prior.OutflowSpacing, s.Prior.OutflowRadii = 1500, []float64{900}
	s.Prior.FrontSpacing, s.Prior.FrontSpeeds, s.Prior.FrontHeadings = 2000, []float64{9}, 4
	e, err := engine.New(s)
	if err != nil {
		t.Fatal(err)
	}
	return e
}

// sampled is what each second of the scene measured; the first step is a
// second after the scene's start.
func sampled(t *testing.T, a *aerodrome, s *synthetic.Scene) []step {
	t.Helper()
	sampler, err := s.NewSampler(a.specs)
	if err != nil {
		t.Fatal(err)
	}
	var steps []step
	for {
		readings, more := sampler.Next(nil)
		if !more {
			return steps
		}
		at := s.Start + sensors.Instant(sampler.Second())*sensors.Second
		steps = append(steps, step{at: at, readings: readings})
	}
}
