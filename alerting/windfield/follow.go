package windfield

import (
	"reflect"
	"slices"
)

// Follow is the estimator to go on with when e, which has seen nothing, is to
// take the place of before; as says for each mast of e which mast of before it
// is, -1 for one that is new. Where both are about the same places and the same
// prior that is before itself, with its gains. Otherwise it is e, which takes
// over what is believed of the air (that does not hang on where masts stand)
// and of the masts that stay. All of it is forgotten within twenty minutes.
func (e *Estimator) Follow(before *Estimator, as []int) *Estimator {
	if slices.Equal(e.masts, before.masts) && slices.Equal(e.targets, before.targets) &&
		e.layout == before.layout && reflect.DeepEqual(e.prior, before.prior) {
		before.doubts = before.doubts.follow(as)
		return before
	}
	if e.memory.states == before.memory.states {
		e.memory.at = before.memory.at
		copy(e.memory.log, before.memory.log)
	}
	e.doubts = before.doubts.follow(as)
	if slices.Equal(e.outflows.templates, before.outflows.templates) {
		e.trail.follow(&before.trail)
	}
	return e
}

// follow is the memory under other indices of the masts; a new one begins
// without doubt.
func (d *doubtMemory) follow(as []int) doubtMemory {
	next := newDoubtMemory(len(as))
	next.at = d.at
	for i, j := range as {
		if j < 0 {
			continue
		}
		for slot := range ambientSlots {
			next.stood[slot*next.masts+i] = d.stood[slot*d.masts+j]
		}
	}
	return next
}
