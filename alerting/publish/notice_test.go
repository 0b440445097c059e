package publish

import (
	"encoding/json"
	"testing"

	"sockline/alerting"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
)

func TestOf(t *testing.T) {
	tests := []struct {
		name     string
		revision int
		state    lifecycle.State
		exercise bool
		want     Phase
	}{
		{"first issue", 1, lifecycle.Open, false, Opening},
		{"later issue of an exercise", 2, lifecycle.Open, true, Update},
		{"last issue", 9, lifecycle.Closed, false, Closing},
		{"closed at its first issue", 1, lifecycle.Closed, false, Closing},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			n := wording.Of(lifecycle.Transition{Alert: lifecycle.Alert{
				ID: "x", Revision: tt.revision, State: tt.state, Exercise: tt.exercise,
				Kind: alerting.HeadwindLoss, Level: alerting.Large, Runway: "07", Operation: "landing",
			}}, wording.Context{Airfield: "skerrymoor"})
			i := Of(n)
			if i.AlertID != "x" || i.Phase != tt.want || i.Exercise != tt.exercise {
				t.Errorf("issue %q, phase %d, exercise %v; want x, %d, %v", i.AlertID, i.Phase, i.Exercise, tt.want, tt.exercise)
			}
			for _, delayed := range []bool{false, true} {
				var o struct {
					Delayed bool
					Notice  string
				}
				if err := json.Unmarshal(i.JSON(delayed), &o); err != nil {
					t.Fatal(err)
				}
				if o.Delayed != delayed || o.Notice != alerting.Notice {
					t.Errorf("delayed %v in the object, want %v; notice %q", o.Delayed, delayed, o.Notice)
				}
			}
		})
	}
}
