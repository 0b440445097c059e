package drift

import "slices"

// TakeOver goes on with what another watch learnt of its mast j as that of
// mast i.
func (w *Watch) TakeOver(i int, from *Watch, j int) {
	w.masts[i] = from.masts[j]
	w.masts[i].hours = slices.Clone(from.masts[j].hours)
}
