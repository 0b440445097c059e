package lifecycle

import (
	"math"
	"testing"

	"sockline/sensors/quantity"
)

// TestTrend follows the trend, stated after every block of five steps, of
// magnitudes that change by so many knots a minute.
func TestTrend(t *testing.T) {
	for _, c := range []struct {
		name  string
		rates []float64 // kt a minute, for one block each
		want  []Trend   // after each block
	}{
		{"none in the first ten seconds", []float64{6, 0}, []Trend{TrendUnknown, Steady}},
		// The rise across n blocks is (n-1) 5 s times the rate: 0.5, 1.0 and
		// 1.5 kt after two, three and four blocks at 6 kt a minute. A hair
		// more than 6 avoids the exact threshold.
		{"growth of 6 kt a minute shows after 20 s", []float64{6.01, 6.01, 6.01, 6.01}, []Trend{TrendUnknown, Steady, Steady, Growing}},
		{"fading of 6 kt a minute likewise", []float64{-6.01, -6.01, -6.01, -6.01}, []Trend{TrendUnknown, Steady, Steady, Fading}},
		{"fast growth shows at once", []float64{30, 30, 30}, []Trend{TrendUnknown, Growing, Growing}},
		// Once growing, 3 kt a minute (1.0 kt across five blocks) keeps it so
		// and 2 kt a minute (0.67 kt) does not; from steady, 3 is not enough.
		{"growing goes on at 3 kt a minute", []float64{12, 12, 12, 3, 3, 3, 3, 3, 3, 3}, []Trend{TrendUnknown, Steady, Growing, Growing, Growing, Growing, Growing, Growing, Growing, Growing}},
		{"growing ends at 2 kt a minute", []float64{12, 12, 12, 2, 2, 2, 2, 2, 2, 2}, []Trend{TrendUnknown, Steady, Growing, Growing, Growing, Growing, Growing, Steady, Steady, Steady}},
		{"3 kt a minute from steady stays steady", []float64{3, 3, 3, 3, 3, 3, 3}, []Trend{TrendUnknown, Steady, Steady, Steady, Steady, Steady, Steady}},
	} {
		t.Run(c.name, func(t *testing.T) {
			var m TrendMemory
			trend, v := TrendUnknown, 20.0
			for i, rate := range c.rates {
				for step := range trendBlock {
					v += rate / 60
					if filled := m.add(v * quantity.Knot); filled != (step == trendBlock-1) {
						t.Fatalf("block %d step %d: filled %v", i, step, filled)
					}
				}
				if trend = m.judge(trend); trend != c.want[i] {
					t.Errorf("after block %d (rise %.2f kt): %s, want %s", i+1, m.rise()/quantity.Knot, trend, c.want[i])
				}
			}
		})
	}
}

// The least-squares line through 1, 3, 2, 5, 4 at 0..4 has the slope
// sum (x-2) y / 10 = (-2*1 - 1*3 + 0*2 + 1*5 + 2*4)/10 = 0.8, by hand: a rise
// of 3.2 across the four spaces.
func TestRiseIsLeastSquares(t *testing.T) {
	m := TrendMemory{Blocks: [trendBlocks]float64{1, 3, 2, 5, 4}, Whole: 5}
	if got := m.rise(); math.Abs(got-3.2) > 1e-12 {
		t.Errorf("rise %v, want 3.2", got)
	}
}
