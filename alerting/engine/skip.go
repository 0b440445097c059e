package engine

import (
	"fmt"

	"sockline/sensors"
)

// SkipTo goes on after t as if the steps up to t had been closed. It is for
// stretches without readings only: before the first step, or once at least
// Memory of silent steps has been closed, after which one more would change
// nothing. The error says that readings wait for one of the steps left out, or
// that t lies behind the last step.
func (e *Engine) SkipTo(t sensors.Instant) error {
	if t < e.last {
		return fmt.Errorf("skip to %s: the step %s has been closed already", t, e.last)
	}
	for i := range e.pending {
		if e.pending[i].Time <= t {
			return fmt.Errorf("skip to %s: a reading of %s waits for its step", t, e.pending[i].Time)
		}
	}
	e.last = t.FloorSecond()
	return nil
}

// Waiting is the last step that readings wait for; false if none do.
func (e *Engine) Waiting() (sensors.Instant, bool) {
	var last sensors.Instant
	for i := range e.pending {
		last = max(last, e.pending[i].Time.CeilSecond())
	}
	return last, len(e.pending) > 0
}
