package windfield

import "sockline/sensors/averages"

// Without is the posterior as it would be for the snapshot of the last Step
// without one mast: its means count as absent. It leaves no trace in what the
// estimator remembers, and the posterior of Step stays as it is. The result is
// overwritten by the next call.
func (e *Estimator) Without(s *averages.Snapshot, mast int) *Posterior {
	if e.fewer.Mean == nil {
		e.fewer = newPosterior(len(e.masts), len(e.targets))
	}
	e.without = mast
	e.posterior, e.fewer = e.fewer, e.posterior
	p := e.step(s)
	e.posterior, e.fewer = e.fewer, e.posterior
	e.without = noMast
	if p == nil {
		return nil
	}
	return &e.fewer
}

// noMast is no mast left out.
const noMast = -1

func newPosterior(masts, targets int) Posterior {
	return Posterior{
		Doubt: make([]float64, masts), Alone: make([]float64, masts), Mean: make([]float64, targets),
		Draws: make([]float64, Draws*targets), Over: make([]Outflow, Draws),
	}
}
