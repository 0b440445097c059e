package averages

import "slices"

// TakeOver goes on with what another recorder remembers of its mast j as that
// of mast i, which must be the same instrument at the same place. It keeps its
// own settings of staleness and maintenance.
func (r *Recorder) TakeOver(i int, from *Recorder, j int) {
	to, of := &r.masts[i], &from.masts[j]
	to.last, to.bins, to.turbulence = of.last, of.bins, of.turbulence
	to.held, to.changes, to.stroke = slices.Clone(of.held), of.changes, of.stroke
}
