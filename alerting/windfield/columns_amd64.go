package windfield

import (
	"math"

	"golang.org/x/sys/cpu"
)

// columnsAVX2 is columns for the first n of stride columns, n being rounded
// down to a multiple of four; rows is at least one.
//
//go:noescape
func columnsAVX2(out *float64, n int, a *float64, stride int, w *float64, rows int)

// columns3AVX2 is the same for three w, one after the other: the sums of each go
// to a row of out, outStride apart.
//
//go:noescape
func columns3AVX2(out *float64, outStride, n int, a *float64, stride int, w *float64, rows int)

// explainAVX2 is explain for the first n of stride patterns, n being rounded down
// to a multiple of four and at least that; extra may be nil.
//
//go:noescape
func explainAVX2(out *float64, n int, b, precision *float64, stride int, odds, extra *float64) (fit, best float64)

// drawnAVX2 is drawn for the first n targets, n being rounded down to a multiple
// of four.
//
//go:noescape
func drawnAVX2(row, mean *float64, n int, base, slope, noise *float64, excess float64)

// addProductsAVX2 is addProducts for the first n, n being rounded down to a
// multiple of four.
//
//go:noescape
func addProductsAVX2(out *float64, n int, a, b *float64)

// exponentialsAVX2 replaces n numbers of at most mildExponent by their
// exponentials, n being rounded down to a multiple of four.
//
//go:noescape
func exponentialsAVX2(x *float64, n int)

// columnsFast tells whether the processor can do several columns at once, and has
// done them: whole vectors, the last of which may begin within the one before.
func columnsFast(out, a, w []float64) bool {
	n := len(out)
	if n < vector || len(w) == 0 || !cpu.X86.HasAVX2 {
		return false
	}
	columnsAVX2(&out[0], n, &a[0], n, &w[0], len(w))
	if n%vector != 0 {
		columnsAVX2(&out[n-vector], vector, &a[n-vector], n, &w[0], len(w))
	}
	return true
}

// columnsFast3 is columnsFast for three w at a time.
func columnsFast3(out []float64, outStride int, a, w []float64, n int) bool {
	if n < vector || len(w) == 0 || !cpu.X86.HasAVX2 {
		return false
	}
	columns3AVX2(&out[0], outStride, n, &a[0], n, &w[0], len(w)/3)
	if n%vector != 0 {
		columns3AVX2(&out[n-vector], outStride, vector, &a[n-vector], n, &w[0], len(w)/3)
	}
	return true
}

// explainFast is explain where it could be done.
func explainFast(out, b, precision, odds, extra []float64) (fit, best float64, done bool) {
	n := len(out)
	if n < vector || !cpu.X86.HasAVX2 {
		return 0, 0, false
	}
	at := func(first, count int) (fit, best float64) {
		var more *float64
		if extra != nil {
			more = &extra[first]
		}
		return explainAVX2(&out[first], count, &b[first], &precision[first], n, &odds[first], more)
	}
	fit, best = at(0, n)
	if n%vector != 0 {
		lastFit, lastBest := at(n-vector, vector)
		fit, best = max(fit, lastFit), max(best, lastBest)
	}
	return fit, best, true
}

// drawnFast does the first targets of drawn, and tells how many.
func drawnFast(row, mean, base, slope, noise []float64, excess float64) int {
	n := len(row) / vector * vector
	if n == 0 || !cpu.X86.HasAVX2 {
		return 0
	}
	drawnAVX2(&row[0], &mean[0], n, &base[0], &slope[0], &noise[0], excess)
	return n
}

// addProductsFast does the first of addProducts, and tells how many.
func addProductsFast(out, a, b []float64) int {
	n := len(out) / vector * vector
	if n == 0 || !cpu.X86.HasAVX2 {
		return 0
	}
	addProductsAVX2(&out[0], n, &a[0], &b[0])
	return n
}

// exponentials replaces each of x by its exponential: to the bit what math.Exp
// gives on this processor, which is the same arithmetic one by one.
func exponentials(x []float64) {
	n := 0
	if cpu.X86.HasAVX2 && cpu.X86.HasFMA { // math.Exp multiplies and adds in one where the processor can
		n = len(x) / vector * vector
		for _, v := range x[:n] {
			if !(math.Abs(v) <= mildExponent) {
				n = 0
				break
			}
		}
	}
	if n > 0 {
		exponentialsAVX2(&x[0], n)
	}
	for i, v := range x[n:] {
		x[n+i] = math.Exp(v)
	}
}

// mildExponent: up to it either way an exponential neither overflows nor
// vanishes.
const mildExponent = 700

// vector is how many numbers one register holds.
const vector = 4
