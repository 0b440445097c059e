package windfield

import "math"

// explain fills out with the evidence of each pattern, b' P b / 2 and its log
// odds, and gives the greatest b' P b (at least 0) and the greatest evidence. b is
// [dims][pattern] and precision, packed, [6][pattern]: each number of P lies
// beside that of the next pattern, so that several patterns are weighed at once.
// extra is further log odds of each, or nil. The bits are the same with and
// without vectors.
func explain(out, b, precision, odds, extra []float64) (fit, best float64) {
	if n := len(out); len(b) != dims*n || len(precision) != 6*n || len(odds) != n || extra != nil && len(extra) != n {
		panic("windfield: evidence of other patterns")
	}
	fit, best, done := explainFast(out, b, precision, odds, extra)
	if !done {
		fit, best = slowExplain(out, b, precision, odds, extra)
	}
	return fit, best
}

func slowExplain(out, b, precision, odds, extra []float64) (fit, best float64) {
	n := len(out)
	best = math.Inf(-1)
	for j := range out {
		b0, b1, b2 := b[j], b[n+j], b[2*n+j]
		q := packed(precision, n, j)
		v := float64(q[0]*float64(b0*b0)) + float64(q[3]*float64(b1*b1)) + float64(q[5]*float64(b2*b2)) +
			2*(float64(q[1]*float64(b0*b1))+float64(q[2]*float64(b0*b2))+float64(q[4]*float64(b1*b2)))
		fit = max(fit, v)
		out[j] = float64(v/2) + odds[j]
		if extra != nil {
			out[j] += extra[j]
		}
		best = max(best, out[j])
	}
	return fit, best
}

// packed is the matrix of pattern j out of [6][n].
func packed(all []float64, n, j int) (m [6]float64) {
	for i := range m {
		m[i] = all[i*n+j]
	}
	return m
}

// drawn writes one draw of the headwind, its mean and what its strength adds to
// that and its noise, and adds it to mean.
func drawn(row, mean, base, slope, noise []float64, excess float64) {
	mean, base, slope, noise = mean[:len(row)], base[:len(row)], slope[:len(row)], noise[:len(row)]
	for t := drawnFast(row, mean, base, slope, noise, excess); t < len(row); t++ {
		v := base[t] + float64(excess*slope[t]) + noise[t]
		row[t] = v
		mean[t] += v
	}
}
