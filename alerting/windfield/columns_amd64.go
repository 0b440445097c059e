package windfield

import "golang.org/x/sys/cpu"

// columnsAVX2 is columns for the first n of stride columns, n being rounded
// down to a multiple of four; rows is at least one.
//
//go:noescape
func columnsAVX2(out *float64, n int, a *float64, stride int, w *float64, rows int)

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

// vector is how many numbers one register holds.
const vector = 4
