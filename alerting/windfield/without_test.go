package windfield

import (
	"math"
	"slices"
	"testing"
)

// A mast left out is as good as one that does not report, and leaving it out
// leaves no trace.
func TestWithout(t *testing.T) {
	e, snapshot := warm(t, 8)
	before := e.Step(snapshot)
	mean, draws := slices.Clone(before.Mean), slices.Clone(before.Draws)
	without := e.Without(snapshot, 3)
	if !slices.Equal(before.Mean, mean) || !slices.Equal(before.Draws, draws) {
		t.Error("the posterior of the step has changed")
	}
	// The same with the mast's means taken from the snapshot: any other value in
	// its place changes next to nothing.
	mast := snapshot.Mast(3)
	kept := mast.Blocks
	for b := range mast.Blocks {
		mast.Blocks[b].East, mast.Blocks[b].North = mast.Blocks[b].East+0.5, mast.Blocks[b].North-0.5
	}
	first := slices.Clone(without.Mean)
	apart, other := 0.0, e.Without(snapshot, 3)
	for i := range first {
		apart = max(apart, math.Abs(first[i]-other.Mean[i]))
	}
	if apart > 0.05 {
		t.Errorf("the mast that is left out still moves the headwind by %.2f m/s", apart)
	}
	mast.Blocks = kept
	if again := e.Step(snapshot); !slices.Equal(again.Mean, mean) || !slices.Equal(again.Draws, draws) {
		t.Error("leaving a mast out left a trace")
	}
}
