package windfield

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"testing"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
)

func randomColumns(rows, cols int) (a, w []float64) {
	rng := rand.New(rand.NewPCG(uint64(rows), uint64(cols)))
	for range rows * cols {
		a = append(a, rng.NormFloat64())
	}
	for range rows {
		w = append(w, rng.NormFloat64())
	}
	return a, w
}

// Sums of every width around those of the vectors are those of the plain loop,
// to the bit, and nothing beside them is written.
func TestColumns(t *testing.T) {
	for rows := range 30 {
		for cols := range 70 {
			a, w := randomColumns(rows, cols)
			want := make([]float64, cols)
			slowColumns(want, a, w)
			space := slices.Repeat([]float64{7}, cols+8)
			columns(space[4:cols+4:cols+4], a, w)
			if !slices.Equal(space[4:cols+4], want) {
				t.Fatalf("%d x %d: %v, want %v", rows, cols, space[4:cols+4], want)
			}
			if slices.ContainsFunc(slices.Concat(space[:4], space[cols+4:]), func(x float64) bool { return x != 7 }) {
				t.Fatalf("%d x %d: written beside the sums: %v", rows, cols, space)
			}
		}
	}
}

// Several sums over the same columns are those of one after the other, to the
// bit, and nothing between their rows is written.
func TestColumnsOf(t *testing.T) {
	for sides := 1; sides < 8; sides++ {
		for rows := range 12 {
			for cols := range 40 {
				a, _ := randomColumns(rows, cols)
				w, _ := randomColumns(sides, rows)
				const gap = 3
				space := slices.Repeat([]float64{7}, sides*(cols+gap))
				want := slices.Clone(space)
				for side := range sides {
					slowColumns(want[side*(cols+gap):][:cols], a, w[side*rows:(side+1)*rows])
				}
				columnsOf(space, cols+gap, a, w, cols, sides)
				if !slices.Equal(space, want) {
					t.Fatalf("%d sides of %d x %d: %v, want %v", sides, rows, cols, space, want)
				}
			}
		}
	}
}

// BenchmarkColumns sets the sums beside those of gonum, of both layouts: for the
// outflows at eight masts, and for the fronts of one heading at their blocks.
func BenchmarkColumns(b *testing.B) {
	for _, size := range [][2]int{{16, 704}, {24, 60}} {
		rows, cols := size[0], size[1]
		a, w := randomColumns(rows, cols)
		across, out := transposed(a, rows, cols), make([]float64, cols)
		for name, sum := range map[string]func(){
			"columns":          func() { columns(out, a, w) },
			"plain":            func() { slowColumns(out, a, w) },
			"gonum-transposed": func() { blas64.Gemv(blas.Trans, 1, mat(rows, cols, a), vec(w), 0, vec(out)) },
			"gonum":            func() { blas64.Gemv(blas.NoTrans, 1, mat(cols, rows, across), vec(w), 0, vec(out)) },
		} {
			b.Run(fmt.Sprintf("%dx%d/%s", rows, cols, name), func(b *testing.B) {
				for b.Loop() {
					sum()
				}
			})
		}
	}
}

// BenchmarkColumnsOf is that for three sides.
func BenchmarkColumnsOf(b *testing.B) {
	const rows, cols = 16, 704
	a, _ := randomColumns(rows, cols)
	w, _ := randomColumns(3, rows)
	out := make([]float64, 3*cols)
	for b.Loop() {
		columnsOf(out, cols, a, w, cols, 3)
	}
}
