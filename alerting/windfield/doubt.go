package windfield

import (
	"math"

	"sockline/sensors"
	"sockline/sensors/averages"
)

// doubtMemory holds for how much of the last twenty minutes each mast's
// neighbours spoke against it: a finite ring on the UTC grid of ambientMemory.
// An outflow is seldom over one mast for so long (a single microburst lives
// about 13 minutes: M.R. Hjelmfelt, "Structure and life cycle of microburst
// outflows observed in Colorado", J. Appl. Meteor. 27, 1988; from memory), a
// fault stays. So a mast alone against its neighbours is believed at first, and less
// the longer it stands alone: that is what keeps a lone true outflow from being
// thrown away.
type doubtMemory struct {
	masts int
	at    [ambientSlots]sensors.Instant
	stood []bool // [slot][mast]
}

// From doubtFrom to doubtTo slots of standing alone (8 and 16 minutes) the
// prior of a fault rises from FaultShare to FaultShareLater.
const (
	doubtFrom = 16
	doubtTo   = 32
)

func newDoubtMemory(masts int) doubtMemory {
	return doubtMemory{masts: masts, stood: make([]bool, ambientSlots*masts)}
}

// remember keeps which masts stand alone at t, if t lies on the grid. alone is
// Posterior.Alone.
func (d *doubtMemory) remember(t sensors.Instant, alone []float64) {
	if t%ambientEvery != 0 {
		return
	}
	slot := int(t/ambientEvery) % ambientSlots
	d.at[slot] = t
	for i, odds := range alone {
		d.stood[slot*d.masts+i] = odds > 1
	}
}

// slots is in how many slots before t a mast stood alone.
func (d *doubtMemory) slots(t sensors.Instant, mast int) int {
	newest, n := (t-1)/ambientEvery, 0
	for i := range sensors.Instant(ambientSlots) {
		at := newest - i
		if at < 0 {
			break
		}
		slot := int(at) % ambientSlots
		if d.at[slot] == at*ambientEvery && d.stood[slot*d.masts+mast] {
			n++
		}
	}
	return n
}

// evenHanded is the prior share of faults under which a mast counts as standing
// alone against its neighbours.
const evenHanded = 0.005

// strokeLasts is how long a stroke of an instrument speaks against its mast. Then its
// neighbours have.
const strokeLasts = ambientSlots * ambientEvery

// faultGains fills the logarithm of each mast's prior of being wrong over the
// even-handed one: what it is weighed with, and what of that is not evidence of now. After a
// stroke, which is, the latter is nothing.
func (e *Estimator) faultGains(s *averages.Snapshot) {
	low := math.Log(e.prior.FaultShare / evenHanded)
	high := math.Log(e.prior.FaultShareLater / evenHanded)
	struck := math.Log(e.prior.StrokeOdds * float64(len(e.masts)) / evenHanded)
	for i := range e.faultGain {
		share := float64(e.doubts.slots(s.At(), i)-doubtFrom) / (doubtTo - doubtFrom)
		e.remembered[i] = low + float64((high-low)*min(max(share, 0), 1))
		e.faultGain[i] = e.remembered[i]
		e.struck[i] = averages.Stroke{}
		m := s.Mast(i)
		// A mast that takes no part cannot be wrong by anything.
		part := m.State == averages.Live && !e.masts[i].Aloft && i != e.without
		if k := m.Stroke; part && k.At > 0 && s.At()-k.At < strokeLasts {
			e.struck[i] = k
			e.faultGain[i], e.remembered[i] = struck, 0
		}
	}
}
