package windfield

import (
	"math"

	"sockline/sensors"
)

// ambientMemory holds how well each ambient state explained the last twenty
// minutes: a finite ring of log evidences on a fixed UTC grid, so that what is
// believed now depends on nothing older and is the same in every replay.
type ambientMemory struct {
	states int
	at     [ambientSlots]sensors.Instant
	log    []float64 // [slot][state], relative to the best of the slot
}

const (
	ambientEvery = 30 * sensors.Second
	ambientSlots = 40
	// ambientWorst bounds how much one slot can speak against a state, so that
	// one odd half minute does not settle the matter.
	ambientWorst = -4
	// ambientTemper: the blocks reach back longer than one slot, so successive
	// slots share data; and eddies live for minutes.
	ambientTemper = 0.35
)

func newAmbientMemory(states int) ambientMemory {
	return ambientMemory{states: states, log: make([]float64, ambientSlots*states)}
}

// remember keeps the log evidences if t lies on the grid.
func (a *ambientMemory) remember(t sensors.Instant, log []float64) {
	if t%ambientEvery != 0 {
		return
	}
	slot := int(t/ambientEvery) % ambientSlots
	a.at[slot] = t
	best := math.Inf(-1)
	for _, l := range log {
		best = math.Max(best, l)
	}
	for k, l := range log {
		a.log[slot*a.states+k] = math.Max(l-best, ambientWorst)
	}
}

// shares fills the prior share of each state at step t from the slots before
// it; no share is under least.
func (a *ambientMemory) shares(t sensors.Instant, least float64, out []float64) {
	for k := range out {
		out[k] = 0
	}
	// Oldest first, so that the sums do not depend on where the ring began.
	newest := (t - 1) / ambientEvery
	for i := ambientSlots - 1; i >= 0; i-- {
		n := newest - sensors.Instant(i)
		if n < 0 {
			continue
		}
		slot := int(n) % ambientSlots
		if a.at[slot] != n*ambientEvery {
			continue
		}
		for k := range out {
			out[k] += float64(ambientTemper * a.log[slot*a.states+k])
		}
	}
	best := math.Inf(-1)
	for _, l := range out {
		best = math.Max(best, l)
	}
	sum := 0.0
	for k, l := range out {
		out[k] = math.Exp(l - best)
		sum += out[k]
	}
	free := 1 - float64(float64(len(out))*least)
	for k := range out {
		out[k] = least + free*out[k]/sum
	}
}
