package windfield

import "math"

// A pattern is a wind of known shape and unknown strength that may lie over
// the ambient field: an outflow (outflow.go) or a gust front (front.go). Its
// strength is a vector A of up to three numbers, A ~ N(0, C); Phi is the wind
// of each at the masts' blocks; a combination q.A, "today's strength", must be
// positive. With K the covariance of the observations without it,
// M = Phi' K^-1 Phi and b = Phi' K^-1 y, generalised least squares gives
// (Sherman-Morrison-Woodbury)
//
//	A | y ~ N(P b, P),  P = (C^-1 + M)^-1
//	log p(y | pattern) - log p(y) = 1/2 b' P b - 1/2 log |I + C M|
//
// and the positive strength multiplies the evidence by twice the posterior
// probability of q.A > 0.

// dims is the number of strengths of a pattern. One that needs fewer leaves
// the last at zero wind.
const dims = 3

// class is one kind of pattern: its fixed part, and how its wind falls on the
// observations of an entry.
type class interface {
	count() int
	// prior gives C (packed), q, and the variance of today's strength that A
	// leaves open, for pattern j; they are the same for all of a class.
	prior(j int) (c [6]float64, q [dims]float64, rest float64)
	// project fills b[d*count+j] with Phi_d' w for every pattern.
	project(en *entry, w, b []float64)
	// gram fills m[j*6..] with M = Phi' K^-1 Phi, packed.
	gram(en *entry, s *state, m []float64)
	// column writes Phi_d of pattern j into the n observations of dst.
	column(en *entry, j, d int, dst []float64)
	// now fills dst with the headwind at the targets of today's unit strength
	// that A leaves open (the innovation), and for each d with the part of A_d
	// in today's wind.
	now(j, d int, dst []float64)
	innovation(j int, dst []float64)
}

// patterns holds, for one class and one ambient state, what the evidence and
// the effect of every pattern need.
type patterns struct {
	precision []float64 // [6][pattern] P, packed: see explain
	inverse   []float64 // [pattern][6] P^-1
	logOdds   []float64 // -1/2 log |I + C M|
	today     []float64 // [pattern][dims] P q: mean of today's strength on b
	sharpness []float64 // 1 / (sqrt(2) its standard deviation)
	lines     [][]float64

	greatest float64 // of logOdds
	// The observations at which all patterns were last weighed, w = K^-1 y of
	// them, and the greatest b' P b then.
	seen, solved []float64
	fit          float64
}

// most is a bound of the evidence of every pattern for the observations y with
// w = K^-1 y. A pattern explains no more than there is, b' P b <= y' K^-1 y; and
// b' P b is the square of a length that a change of y by d moves by at most the
// root of d' K^-1 d, so that what was weighed a moment ago bounds it too.
func (p *patterns) most(y, w []float64) float64 {
	all, moved := 0.0, 0.0
	for i, v := range y {
		all += float64(v * w[i])
		if len(p.seen) > 0 {
			moved += float64((v - p.seen[i]) * (w[i] - p.solved[i]))
		}
	}
	fit := all
	if len(p.seen) > 0 {
		far := math.Sqrt(p.fit) + math.Sqrt(max(moved, 0))
		fit = min(fit, float64(far*far))
	}
	return float64(fit/2*(1+roundings)) + p.greatest
}

// roundings is more than what rounding can do to a bound, as a share of it.
const roundings = 1e-6

// remember keeps what all patterns were weighed by.
func (p *patterns) remember(y, w []float64, fit float64) {
	p.seen, p.solved, p.fit = append(p.seen[:0], y...), append(p.solved[:0], w...), fit
}

// strengthNow is the posterior mean of today's strength of pattern j before it
// is held positive.
func (p *patterns) strengthNow(j int, b0, b1, b2 float64) float64 {
	t := p.today[j*dims : j*dims+dims : j*dims+dims]
	return float64(t[0]*b0) + float64(t[1]*b1) + float64(t[2]*b2)
}

// patternsFor computes, once for a state and class, what the evidence needs.
func (e *Estimator) patternsFor(en *entry, s *state, k int) *patterns {
	if s.patterns[k] != nil {
		return s.patterns[k]
	}
	c := e.classes[k]
	n := c.count()
	p := &patterns{
		precision: make([]float64, n*6), inverse: make([]float64, n*6), logOdds: make([]float64, n),
		today: make([]float64, n*dims), sharpness: make([]float64, n), lines: make([][]float64, n),
	}
	p.greatest = math.Inf(-1)
	m := make([]float64, n*6)
	c.gram(en, s, m)
	cov, q, rest := c.prior(0)
	inv, logDetC := invert3(cov)
	for j := range n {
		var sum [6]float64
		for i := range sum {
			sum[i] = inv[i] + m[j*6+i]
		}
		prec, logDet := invert3(sum)
		for i, v := range prec {
			p.precision[i*n+j] = v
		}
		copy(p.inverse[j*6:], sum[:])
		p.logOdds[j] = -(logDet + logDetC) / 2 // |I + C M| = |C| |C^-1 + M|
		p.greatest = max(p.greatest, p.logOdds[j])
		today := mul3(prec, q)
		copy(p.today[j*dims:], today[:])
		v := rest
		for i := range dims {
			v += float64(q[i] * today[i])
		}
		p.sharpness[j] = 1 / math.Sqrt(2*v)
	}
	s.patterns[k] = p
	return p
}

// line is the effect of pattern j on the targets: [d] what a unit of A_d adds
// to the posterior mean headwind, then the innovation. Computed when first
// drawn.
func (e *Estimator) line(en *entry, s *state, k, j int) []float64 {
	p := s.patterns[k]
	if p.lines[j] != nil {
		return p.lines[j]
	}
	nt := len(e.targets)
	out := make([]float64, (dims+1)*nt)
	column, effect := e.column[:en.n], e.effect
	for d := range dims {
		dst := out[d*nt : (d+1)*nt]
		e.classes[k].now(j, d, dst)
		e.classes[k].column(en, j, d, column)
		first, end := inhabited(column)
		columns(effect, s.gain[first*nt:end*nt], column[first:end])
		for t, v := range effect {
			dst[t] -= v
		}
	}
	e.classes[k].innovation(j, out[dims*nt:])
	p.lines[j] = out
	return out
}

// inhabited is the least stretch of a column that holds all that is not zero:
// an outflow's strength stands in one block only.
func inhabited(column []float64) (first, end int) {
	end = len(column)
	for end > 0 && column[end-1] == 0 {
		end--
	}
	for first < end && column[first] == 0 {
		first++
	}
	return first, end
}

// strength is the posterior of one pattern's strength.
type strength struct {
	mean   [dims]float64 // of A
	share  [dims]float64 // regression of A on today's strength
	now    float64       // mean of today's strength before it is held positive
	spread float64       // its standard deviation
	open   float64       // regression of the innovation on today's strength
}

func (e *Estimator) strengthOf(s *state, k, j int, b [dims]float64) strength {
	_, q, rest := e.classes[k].prior(j)
	return strengthFrom(packed(s.patterns[k].precision, e.classes[k].count(), j), q, rest, b)
}

// strengthFrom is the posterior of the strengths with the covariance p, given
// b.
func strengthFrom(p [6]float64, q [dims]float64, rest float64, b [dims]float64) strength {
	var st strength
	st.mean = mul3(p, b)
	pq := mul3(p, q)
	v := rest
	for i := range dims {
		st.now += float64(q[i] * st.mean[i])
		v += float64(q[i] * pq[i])
	}
	for i := range dims {
		st.share[i] = pq[i] / v
	}
	st.open = rest / v
	st.spread = math.Sqrt(v)
	return st
}

// invert3 inverts a symmetric positive definite 3x3 matrix packed as
// (00, 01, 02, 11, 12, 22) and gives the logarithm of its determinant.
func invert3(a [6]float64) (inv [6]float64, logDet float64) {
	inv, det := inverse3(a)
	return inv, math.Log(det)
}

// inverse3 is invert3 with the determinant itself.
func inverse3(a [6]float64) (inv [6]float64, det float64) {
	c00 := float64(a[3]*a[5]) - float64(a[4]*a[4])
	c01 := float64(a[2]*a[4]) - float64(a[1]*a[5])
	c02 := float64(a[1]*a[4]) - float64(a[2]*a[3])
	det = float64(a[0]*c00) + float64(a[1]*c01) + float64(a[2]*c02)
	inv = [6]float64{
		c00 / det, c01 / det, c02 / det,
		(float64(a[0]*a[5]) - float64(a[2]*a[2])) / det,
		(float64(a[1]*a[2]) - float64(a[0]*a[4])) / det,
		(float64(a[0]*a[3]) - float64(a[1]*a[1])) / det,
	}
	return inv, det
}

// mul3 is a packed symmetric 3x3 matrix times a vector.
func mul3(a [6]float64, x [3]float64) [3]float64 {
	return [3]float64{
		float64(a[0]*x[0]) + float64(a[1]*x[1]) + float64(a[2]*x[2]),
		float64(a[1]*x[0]) + float64(a[3]*x[1]) + float64(a[4]*x[2]),
		float64(a[2]*x[0]) + float64(a[4]*x[1]) + float64(a[5]*x[2]),
	}
}

// belowZero is the probability of N(mean, sd) below 0.
func belowZero(mean, sd float64) float64 { return math.Erfc(mean/(sd*math.Sqrt2)) / 2 }

// positiveNormal is the point of N(mean, sd) held above 0 with the probability
// u below it; below is belowZero of the same.
func positiveNormal(mean, sd, below, u float64) float64 {
	p := below + float64(u*(1-below))
	p = min(max(p, 1e-12), 1-1e-12)
	return math.Max(mean+float64(float64(sd*math.Sqrt2)*math.Erfinv(float64(2*p)-1)), 0)
}
