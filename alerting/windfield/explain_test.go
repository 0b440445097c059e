package windfield

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// same tells whether numbers have the same bits.
func same(a, b []float64) bool {
	return slices.EqualFunc(a, b, func(x, y float64) bool { return math.Float64bits(x) == math.Float64bits(y) })
}

// The evidence of any number of patterns has the bits of the plain loop, as have
// the greatest of both kinds.
func TestExplain(t *testing.T) {
	for n := range 90 {
		rng := rand.New(rand.NewPCG(uint64(n), 1))
		numbers := func(count int) (out []float64) {
			for range count {
				out = append(out, rng.NormFloat64()*math.Exp(3*rng.NormFloat64()))
			}
			return out
		}
		b, precision, odds, extra := numbers(dims*n), numbers(6*n), numbers(n), numbers(n)
		for _, more := range [][]float64{nil, extra} {
			got, want := make([]float64, n+1), make([]float64, n+1)
			fit, best := explain(got[:n:n], b, precision, odds, more)
			wantFit, wantBest := slowExplain(want[:n], b, precision, odds, more)
			if !same(append(got, fit, best), append(want, wantFit, wantBest)) {
				t.Fatalf("%d patterns: %v with %v and %v, want %v with %v and %v", n, got, fit, best, want, wantFit, wantBest)
			}
		}
	}
}

// A draw and added products have the bits of the plain sums, and nothing beside it is written.
func TestDrawn(t *testing.T) {
	for n := range 40 {
		rng := rand.New(rand.NewPCG(uint64(n), 2))
		numbers := func() (out []float64) {
			for range n + 1 {
				out = append(out, rng.NormFloat64())
			}
			return out
		}
		row, mean, base, slope, noise, excess := numbers(), numbers(), numbers(), numbers(), numbers(), rng.NormFloat64()
		wantRow, wantMean := slices.Clone(row), slices.Clone(mean)
		for i := range n {
			wantRow[i] = base[i] + float64(excess*slope[i]) + noise[i]
			wantMean[i] += wantRow[i]
		}
		wantNoise := slices.Clone(noise)
		for i := range n {
			wantNoise[i] += float64(base[i] * slope[i])
		}
		drawn(row[:n], mean, base, slope, noise, excess)
		addProducts(noise[:n], base, slope)
		if !same(row, wantRow) || !same(mean, wantMean) || !same(noise, wantNoise) {
			t.Fatalf("%d targets: %v, %v and %v, want %v, %v and %v", n, row, mean, noise, wantRow, wantMean, wantNoise)
		}
	}
}

// Exponentials of several numbers at a time are those that math.Exp gives one by
// one, to the bit, whatever their size.
func TestExponentials(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	odd := []float64{0, math.Copysign(0, -1), 700, -700, 700.5, -720, -745.2, 710, 1e300, -1e300, 1e-300, math.Inf(1), math.Inf(-1), math.NaN()}
	for k := range 20_000 {
		x := make([]float64, k%23)
		for i := range x {
			x[i] = rng.NormFloat64() * math.Exp(4*rng.Float64())
			switch {
			case k%7 == 0:
				x[i] = (rng.Float64() - 0.5) * 2 * mildest
			case k%50 == 1 && rng.IntN(5) == 0:
				x[i] = odd[rng.IntN(len(odd))]
			}
		}
		want := make([]float64, len(x))
		for i, v := range x {
			want[i] = math.Exp(v)
		}
		got := slices.Clone(x)
		exponentials(got)
		if !same(got, want) {
			t.Fatalf("exponentials of %v: %v, want %v", x, got, want)
		}
	}
}

// mildest is as far as numbers are spread whose exponentials are done together.
const mildest = 700
