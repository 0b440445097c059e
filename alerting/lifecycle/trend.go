package lifecycle

import "sockline/sensors/quantity"

// The trend is judged on means of blocks, so that it can change at most once
// a block: with the two thresholds below, that keeps it from chattering.
const (
	// trendBlock is how many successive steps make a block (5 s of 1 s steps).
	trendBlock = 5
	// trendBlocks is how many whole blocks are remembered: 25 s.
	trendBlocks = 5
	// trendLeast is how many whole blocks a trend needs: none is stated in
	// the first 10 s.
	trendLeast = 2

	// trendEnter and trendStay are the fitted changes across the remembered
	// blocks at which growing or fading begins, and above which it goes on.
	// 1.5 kt in the 20 s between the middles of the first and last of five
	// blocks is 4.5 kt a minute: an outflow that grows to 20 kt in five
	// minutes is just below it, one that matters within an approach above.
	trendEnter = 1.5 * quantity.Knot // m/s
	trendStay  = 0.8 * quantity.Knot // m/s
)

// TrendMemory is the last half minute of an alert's magnitude, in m/s.
type TrendMemory struct {
	Blocks [trendBlocks]float64 // means of whole blocks, oldest first
	Whole  int                  // how many of Blocks are in use
	Sum    float64              // of the block being filled
	Count  int                  // steps in the block being filled
}

// add takes the magnitude of the next step; it reports whether a block was
// filled by it.
func (m *TrendMemory) add(magnitude float64) bool {
	m.Sum += magnitude
	m.Count++
	if m.Count < trendBlock {
		return false
	}
	if m.Whole == trendBlocks {
		copy(m.Blocks[:], m.Blocks[1:])
		m.Whole--
	}
	m.Blocks[m.Whole] = m.Sum / trendBlock
	m.Whole++
	m.Sum, m.Count = 0, 0
	return true
}

// judge is the trend after a filled block, given the one before it.
func (m *TrendMemory) judge(before Trend) Trend {
	if m.Whole < trendLeast {
		return TrendUnknown
	}
	rise := m.rise()
	switch {
	case rise >= trendEnter, before == Growing && rise > trendStay:
		return Growing
	case rise <= -trendEnter, before == Fading && rise < -trendStay:
		return Fading
	}
	return Steady
}

// rise is the change (m/s) across the remembered blocks along their
// least-squares line: with x = 0 .. n-1 and mean x',
//
//	rise = (n-1) sum (x-x') y / sum (x-x')^2
func (m *TrendMemory) rise() float64 {
	mid := float64(float64(m.Whole-1) / 2)
	var above, below float64
	for i := range m.Whole {
		x := float64(i) - mid
		// Rounded as a product: a fused multiply-add on another machine
		// must not give another trend.
		above += float64(x * m.Blocks[i])
		below += float64(x * x)
	}
	return float64(m.Whole-1) * above / below
}
