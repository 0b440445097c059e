package windfield

import (
	"gonum.org/v1/gonum/blas/blas64"
)

// faultBank is the thought that one mast is wrong: its error is a steady wind
// of any direction that no target feels, in all its blocks or, where it has just
// begun, in the newest one or two: pattern j is mast j%masts with the newest
// blocks-j/masts of them wrong. It is the leave-one-out residual
// (O. Dubrule, "Cross validation of kriging in a unique neighborhood",
// Mathematical Geology 15, 1983; from memory) as a member of the mixture: what
// speaks against it is only that faults are rare, the more so while a mast has
// not stood alone for long (doubt.go): a lone true outflow must not be thrown
// away.
type faultBank struct {
	masts     int
	deviation float64 // of the error, one component, m/s
}

func (b *faultBank) count() int { return blocks * b.masts }

// newest is how many of the newest blocks pattern j of the faults holds wrong.
func newest(j, masts int) int { return blocks - j/masts }

// prior: two strengths, east and north, in every block alike. No sign is
// required: q is zero, and the positive "today's strength" a dummy.
func (b *faultBank) prior(int) (c [6]float64, q [dims]float64, rest float64) {
	v := float64(b.deviation * b.deviation)
	return [6]float64{v, 0, 0, v, 0, 1}, q, 1
}

// place is where a mast stands among the live ones, -1 if it does not.
func place(en *entry, mast int) int {
	for i, m := range en.live {
		if m == mast {
			return i
		}
	}
	return -1
}

func (b *faultBank) project(en *entry, w, out []float64) {
	clear(out)
	n := b.count()
	for i, m := range en.live {
		for j := m; j < n; j += b.masts {
			for k := range newest(j, b.masts) {
				o := (k*len(en.live) + i) * 2
				out[j] += w[o]
				out[n+j] += w[o+1]
			}
		}
	}
}

func (b *faultBank) gram(en *entry, s *state, m []float64) {
	east, north := make([]float64, en.n), make([]float64, en.n)
	solved := make([]float64, en.n)
	for j := range b.count() {
		if place(en, j%b.masts) < 0 {
			continue
		}
		b.column(en, j, 0, east)
		b.column(en, j, 1, north)
		multiply(s, east, solved)
		m[j*6] = blas64.Dot(vec(solved), vec(east))
		m[j*6+1] = blas64.Dot(vec(solved), vec(north))
		multiply(s, north, solved)
		m[j*6+3] = blas64.Dot(vec(solved), vec(north))
	}
}

func (b *faultBank) column(en *entry, j, d int, dst []float64) {
	clear(dst)
	i := place(en, j%b.masts)
	if i < 0 || d == 2 {
		return
	}
	for k := range newest(j, b.masts) {
		dst[(k*len(en.live)+i)*2+d] = 1
	}
}

func (b *faultBank) now(_, _ int, dst []float64)     { clear(dst) }
func (b *faultBank) innovation(_ int, dst []float64) { clear(dst) }
