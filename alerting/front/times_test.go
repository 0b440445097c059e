package front

import (
	"math"
	"math/rand/v2"
	"testing"

	"golang.org/x/sys/cpu"
)

// All speeds of a row at once give the bits of one after the other, for any number
// of masts, unless their variances multiply beyond all bounds.
func TestTimesOfARow(t *testing.T) {
	rng := rand.New(rand.NewPCG(21, 22))
	var x, y []float64
	for range 60 {
		x, y = append(x, rng.NormFloat64()*3000), append(y, rng.NormFloat64()*3000)
	}
	b := newBank(x, y, 0, 0)
	fast := 0
	for n := 1; n <= 60; n++ {
		var hits []hit
		for k := range n {
			hits = append(hits, hit{place: k, t: rng.NormFloat64() * 200, sd: math.Exp(rng.NormFloat64() + 2)})
		}
		for range 50 {
			row := b.row(rng.IntN(curves), rng.IntN(headings))
			var got, want posterior
			const line = 40
			if !got.timesFast(line, b, hits, row) {
				continue
			}
			fast++
			for s := range speeds {
				want.timesOf(line+s, s, b.slow[s], hits, row)
			}
			if got.t0 != want.t0 || got.spread != want.spread || got.ssr != want.ssr || got.product != want.product || got.logs != want.logs {
				t.Fatalf("%d masts: %v %v %v, one by one %v %v %v", n, got.ssr, got.product, got.logs, want.ssr, want.product, want.logs)
			}
		}
	}
	if fast == 0 && cpu.X86.HasAVX2 {
		t.Error("no row went the fast way")
	}
}

// What is taken for saturated is that to the last bit.
func TestSaturated(t *testing.T) {
	one := 1.0
	for x := float64(saturated); x < 2000; x *= 1.01 {
		if v := missed + (1-missed)/(one+math.Exp(x)); v != missed {
			t.Errorf("at %g the share is %g, not %g", x, v, missed)
		}
		if v := missed + (1-missed)/(one+math.Exp(-x)); v != 1 {
			t.Errorf("at %g the share is %g, not 1", -x, v)
		}
	}
}
