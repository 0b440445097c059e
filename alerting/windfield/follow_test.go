package windfield

import (
	"slices"
	"testing"

	"sockline/sensors"
	"sockline/sensors/averages"
)

// TestFollow holds what goes on from one estimator to the next: all of it
// where nothing has changed; where masts have, what is believed of the air, and
// the doubt about each mast that stays, under its new index.
func TestFollow(t *testing.T) {
	layout := averages.NewLayout(20e9)
	places := []Mast{{X: 0, Y: 0}, {X: 1000, Y: 0}, {X: 2000, Y: 100}}
	targets := []Target{{500, 0, 1, 0}, {1500, 50, 1, 0}}
	before := func() *Estimator {
		e := New(places, targets, layout, DefaultPrior())
		at := 30 * sensors.Second
		e.memory.remember(at, []float64{0, -1, -2, -3}[:e.memory.states])
		e.doubts.remember(at, []float64{9, 0.1, 4})
		return e
	}
	doubted := func(e *Estimator) (all []int) {
		for i := range e.masts {
			all = append(all, e.doubts.slots(31*sensors.Second, i))
		}
		return all
	}
	for _, row := range []struct {
		name    string
		masts   []Mast
		as      []int
		same    bool
		doubted []int // slots, by mast
	}{
		{"nothing changed", places, []int{0, 1, 2}, true, []int{1, 0, 1}},
		{"another instrument at the same place", places, []int{-1, 1, 2}, true, []int{0, 0, 1}},
		{"another order", []Mast{places[2], places[0], places[1]}, []int{2, 0, 1}, false, []int{1, 1, 0}},
		{"one less", places[1:], []int{1, 2}, false, []int{0, 1}},
		{"one more", slices.Concat([]Mast{{X: 3000, Y: 0}}, places), []int{-1, 0, 1, 2}, false, []int{0, 1, 0, 1}},
		{"one moved", []Mast{places[0], places[1], {X: 2000, Y: 101}}, []int{0, 1, -1}, false, []int{1, 0, 0}},
	} {
		t.Run(row.name, func(t *testing.T) {
			old := before()
			next := New(row.masts, targets, layout, DefaultPrior())
			got := next.Follow(old, row.as)
			if (got == old) != row.same || !row.same && got != next {
				t.Errorf("the same estimator goes on: %v, want %v", got == old, row.same)
			}
			if d := doubted(got); !slices.Equal(d, row.doubted) {
				t.Errorf("doubted in %v slots, want %v", d, row.doubted)
			}
			if !slices.Equal(got.memory.log, before().memory.log) || got.memory.at != before().memory.at {
				t.Error("what is believed of the air is lost")
			}
		})
	}
}
