package windfield

import "golang.org/x/sys/cpu"

// columnsAVX2 is columns for the first n of stride columns, n being rounded
// down to a multiple of four; rows is at least one.
//
//go:noescape
func columnsAVX2(out *float64, n int, a *float64, stride int, w *float64, rows int)

// columnsFast does the first columns where the processor can do several at once,
// and tells how many.
func columnsFast(out, a, w []float64) int {
	n := len(out) &^ 3
	if n == 0 || len(w) == 0 || !cpu.X86.HasAVX2 {
		return 0
	}
	columnsAVX2(&out[0], n, &a[0], len(out), &w[0], len(w))
	return n
}
