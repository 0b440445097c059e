package windfield

// columns fills out with the sum of the rows of a, each times its w: a is
// [len(w)][len(out)]. Every step asks this of all patterns, so that it is most
// of what a step is made of; the patterns lie side by side, for then several fit
// one vector of the processor and each sum runs over the rows in their order. The
// bits are the same with and without vectors.
func columns(out, a, w []float64) {
	if len(a) != len(w)*len(out) {
		panic("windfield: columns of another matrix")
	}
	done := columnsFast(out, a, w)
	slowColumns(out, a, w, done)
}

// slowColumns does the columns from first on.
func slowColumns(out, a, w []float64, first int) {
	if first == len(out) {
		return
	}
	rest := out[first:]
	clear(rest)
	for i, x := range w {
		row := a[i*len(out)+first : (i+1)*len(out)]
		for j := range rest {
			rest[j] += float64(row[j] * x)
		}
	}
}

// transposed is a [rows][cols] as [cols][rows].
func transposed(a []float64, rows, cols int) []float64 {
	t := make([]float64, len(a))
	for i := range rows {
		for j := range cols {
			t[j*rows+i] = a[i*cols+j]
		}
	}
	return t
}
