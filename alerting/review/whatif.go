package review

import (
	"fmt"
	"reflect"
	"slices"
	"time"

	"sockline/alerting/hazard"
	"sockline/alerting/judged"
	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

// Levels are the rules that a "what if" may change without a new analysis.
type Levels struct {
	Levels hazard.Levels
	Hold   time.Duration
}

// Rejudger takes kept steps through the life of alerts by other levels. Days
// come in their order.
type Rejudger struct {
	airfield string
	rules    Levels
	fits     func(*judged.Context) error

	machine *lifecycle.Machine
	context *judged.Context
	judge   *judged.Judge
	lives   *Lives
	last    sensors.Instant
	found   []hazard.Assessment
	turns   []lifecycle.Transition
	open    []lifecycle.Alert // reused

	Steps   int      // judged
	Missing int      // seconds between the first and the last of them that are not kept
	Exact   bool     // no level lies between two that are kept
	Faults  []string // what could not be read
}

// NewRejudger judges by these rules. fits says why the steps of a context
// cannot be judged by them without a new analysis; it may be nil.
func NewRejudger(airfield string, rules Levels, fits func(*judged.Context) error) *Rejudger {
	if fits == nil {
		fits = func(*judged.Context) error { return nil }
	}
	return &Rejudger{airfield: airfield, rules: rules, fits: fits, lives: NewLives(), Exact: true}
}

// Step judges a kept step.
func (r *Rejudger) Step(s *judged.Step) error {
	if r.context != s.Context {
		if err := r.follow(s.Context, s.At); err != nil {
			return err
		}
	}
	if r.last != 0 && s.At > r.last+sensors.Second {
		r.gap(s.At)
	}
	r.last = s.At
	r.Steps++
	r.found = r.judge.Assess(s, r.found)
	r.turns = r.machine.Step(s.At, r.found, r.turns[:0])
	r.take(r.turns)
	return nil
}

// Open tells whether an alert that opened before a moment is open.
func (r *Rejudger) Open(before sensors.Instant) bool {
	if r.machine == nil {
		return false
	}
	r.open = r.machine.Open(r.open[:0])
	return slices.ContainsFunc(r.open, func(a lifecycle.Alert) bool { return a.Opened < before })
}

// Break tells that a time follows that is judged elsewhere: alerts that are
// open are left as they are.
func (r *Rejudger) Break() { r.machine, r.context, r.last = nil, nil, 0 }

// gap goes over steps that are not kept as the daemon goes over a time in which
// it did not run: it takes its alerts up again, or closes them.
func (r *Rejudger) gap(next sensors.Instant) {
	r.Missing += int((next-r.last)/sensors.Second) - 1
	open := r.machine.Open(nil)
	r.take(r.machine.Restore(open, next-sensors.Second, nil))
}

func (r *Rejudger) take(turns []lifecycle.Transition) {
	for i := range turns {
		r.lives.Take(&turns[i].Alert)
	}
}

// follow takes up another context from the step t on.
func (r *Rejudger) follow(c *judged.Context, t sensors.Instant) error {
	if r.context != nil && reflect.DeepEqual(*r.context, *c) { // as another file has it
		r.context = c
		return nil
	}
	if err := r.fits(c); err != nil {
		return err
	}
	judge, err := judged.NewJudge(c, r.rules.Levels)
	if err != nil {
		return fmt.Errorf("judge the steps from %s on: %w", t, err)
	}
	settings := lifecycle.Settings{Airfield: r.airfield, Paths: c.Paths, StationIDs: c.Stations, Hold: r.rules.Hold}
	if r.machine == nil {
		r.machine = lifecycle.New(settings)
	} else {
		r.take(r.machine.Rebase(settings, r.last, nil))
	}
	r.context, r.judge = c, judge
	r.Exact = r.Exact && judge.Exact()
	return nil
}

// Lives are the alerts that opened in [from, to); 0 is no limit.
func (r *Rejudger) Lives(from, to sensors.Instant) []Life { return r.lives.OpenedIn(from, to) }
