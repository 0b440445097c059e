package windfield

import (
	"math"
	"testing"

	"sockline/sensors"
)

// No pattern explains a wind better than the bound says by which whole classes
// are passed over, and in a steady wind the bound is of use: it comes near.
func TestBoundOfTheEvidence(t *testing.T) {
	masts, targets := field(8)
	s := newSite(t, len(masts))
	e := New(masts, targets, s.layout, DefaultPrior())
	near, all := 0, 0
	for k := 1; k <= 740; k++ {
		s.report(k, gusty(masts, k))
		if k < 60 {
			continue
		}
		snapshot := s.recorder.Snapshot(epoch + sensors.Instant(k)*sensors.Second)
		en := e.entryFor(snapshot)
		e.observe(snapshot, en)
		for _, state := range en.states {
			e.solve(state)
			for c := range faultClass {
				p, n, b := e.patternsFor(en, state, c), e.classes[c].count(), e.b[c]
				bound, known := p.most(e.y, e.w), len(p.seen) > 0
				e.classes[c].project(en, e.w, b)
				best, fit := math.Inf(-1), 0.0
				for j := range n {
					b3 := [3]float64{b[j], b[n+j], b[2*n+j]}
					mean := mul3(packed(p.precision, n, j), b3)
					v := b3[0]*mean[0] + b3[1]*mean[1] + b3[2]*mean[2]
					best, fit = max(best, v/2+p.logOdds[j]), max(fit, v)
				}
				p.remember(e.y, e.w, fit)
				if best > bound {
					t.Fatalf("at %d s a pattern of class %d has the evidence %g above the bound %g", k, c, best, bound)
				}
				if known {
					all++
					if bound-fit/2-p.greatest < 3 {
						near++
					}
				}
			}
		}
	}
	t.Logf("the bound is within 3 of the best fit in %d of %d cases", near, all)
	if near < all/2 {
		t.Errorf("the bound comes within 3 of the best fit in %d of %d cases only", near, all)
	}
}
