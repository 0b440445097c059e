package quality

import "slices"

// TakeOver goes on with what another watch knows of the clock of its station j
// as that of station i. What is taken out of its times stays, unless the
// station is not to be corrected any more.
func (c *Clocks) TakeOver(i int, from *Clocks, j int) {
	m := &c.masts[i]
	correct := m.correct
	*m = from.masts[j]
	m.correct, m.minutes = correct, slices.Clone(m.minutes)
	if !correct {
		m.applied = 0
	}
}

// TakeShared goes on with the error that all stations of another watch share.
func (c *Clocks) TakeShared(from *Clocks) { c.shared = from.shared }
