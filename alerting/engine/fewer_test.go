package engine_test

import (
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/engine"
	"sockline/alerting/lifecycle"
)

// An alert tells how far it hangs on a single mast: every mast is left out in
// turn, and the change without any one of
// several masts is still a change of its sign.
func TestOneFewer(t *testing.T) {
	most, signed := 0, true
	a, s := keptScene(t, "outflow-on-path")
	play(a.engine(t), a.messages(t, s), s.Start, s.Start.Add(s.Length), func(res *engine.Result) {
		for _, tr := range res.Transitions {
			a := &tr.Alert
			if a.Kind != alerting.HeadwindLoss || a.State != lifecycle.Open || !a.Observed {
				continue
			}
			most = max(most, len(a.Fewer))
			for _, f := range a.Fewer {
				signed = signed && f.Change <= 0 && f.At <= a.Updated && a.Updated.Sub(f.At) <= 2*time.Minute+5*time.Second
			}
		}
	})
	if most != 8 || !signed {
		t.Errorf("of 8 masts %d were left out; signed and in time: %v", most, signed)
	}
}
