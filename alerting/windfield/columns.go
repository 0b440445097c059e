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
	if !columnsFast(out, a, w) {
		slowColumns(out, a, w)
	}
}

func slowColumns(out, a, w []float64) {
	clear(out)
	for i, x := range w {
		row := a[i*len(out) : (i+1)*len(out)]
		for j := range out {
			out[j] += float64(row[j] * x)
		}
	}
}

// columnsOf is columns for several w over the same a, side by side: out is
// [sides][cols] with stride from row to row, w [sides][rows]. a then passes through
// the cache of the processor once, which is what takes the time.
func columnsOf(out []float64, stride int, a, w []float64, cols, sides int) {
	rows := len(w) / sides
	if len(a) != rows*cols || len(out) < (sides-1)*stride+cols {
		panic("windfield: columns of another matrix")
	}
	side := 0
	for ; side+3 <= sides; side += 3 {
		if !columnsFast3(out[side*stride:], stride, a, w[side*rows:(side+3)*rows], cols) {
			break
		}
	}
	for ; side < sides; side++ {
		columns(out[side*stride:side*stride+cols], a, w[side*rows:(side+1)*rows])
	}
}

// product fills out, [rows][cols], with the matrix product of a, [rows][inner],
// and b, [inner][cols].
func product(out, a, b []float64, rows int) {
	cols, inner := len(out)/rows, len(a)/rows
	for r := range rows {
		columns(out[r*cols:(r+1)*cols], b, a[r*inner:(r+1)*inner])
	}
}

// addProducts adds to each of out the product of what stands at its place in a
// and b.
func addProducts(out, a, b []float64) {
	a, b = a[:len(out)], b[:len(out)]
	for j := addProductsFast(out, a, b); j < len(out); j++ {
		out[j] += float64(a[j] * b[j])
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
