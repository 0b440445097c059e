package windfield

import (
	"math"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
)

// An outflow template adds a wind a(x) A(t): a known pattern times an unknown
// strength that changes over the blocks, A ~ N(0, C) with
// C_bc = s2 exp(-|age_b - age_c| / OutflowTime), and must be positive today.
// With Phi = the pattern at the masts for each block, K the covariance of the
// observations without it, M = Phi' K^-1 Phi and b = Phi' K^-1 y, generalised
// least squares gives (Sherman-Morrison-Woodbury)
//
//	A | y ~ N(P b, P),  P = (C^-1 + M)^-1
//	log p(y | template) - log p(y) = 1/2 b' P b - 1/2 log |I + C M|

// strengthPrior is C, its inverse and today's weights on the blocks.
func (e *Estimator) strengthPrior() (inv [6]float64, c [6]float64, now [blocks]float64, rest float64) {
	s2 := float64(e.prior.OutflowStrength * e.prior.OutflowStrength)
	cov := func(dt float64) float64 { return s2 * math.Exp(-math.Abs(dt)/e.prior.OutflowTime) }
	k := 0
	for b := range blocks {
		for d := b; d < blocks; d++ {
			c[k] = cov(e.ages[b] - e.ages[d])
			k++
		}
	}
	inv, _ = invert3(c)
	var toNow [blocks]float64
	for b := range blocks {
		toNow[b] = cov(e.ages[b])
	}
	now = mul3(inv, toNow)
	rest = s2
	for b := range blocks {
		rest -= float64(now[b] * toNow[b])
	}
	return inv, c, now, rest
}

// outflows computes, once for a state, what the evidence of every template
// needs.
func (e *Estimator) outflows(en *entry, s *state) *outflows {
	if s.outflows != nil {
		return s.outflows
	}
	nj, w := len(e.bank.templates), 2*len(en.live)
	inv, c, now, rest := e.strengthPrior()
	o := &outflows{
		precision: make([]float64, nj*6),
		logOdds:   make([]float64, nj),
		nowWeight: now,
		nowRest:   rest,
		lines:     make([][]float64, nj),
	}
	// M = Phi' K^-1 Phi, one block pair at a time: (bank . K^-1_bc) row-dot bank.
	tmp := make([]float64, nj*w)
	m := make([]float64, nj*6)
	k := 0
	for b := range blocks {
		for d := b; d < blocks; d++ {
			sub := blas64.General{Rows: w, Cols: w, Stride: en.n, Data: s.inverse[b*w*en.n+d*w:]}
			blas64.Gemm(blas.NoTrans, blas.NoTrans, 1, mat(nj, w, en.bank), sub, 0, mat(nj, w, tmp))
			for j := range nj {
				m[j*6+k] = blas64.Dot(vec(tmp[j*w:(j+1)*w]), vec(en.bank[j*w:(j+1)*w]))
			}
			k++
		}
	}
	_, logDetC := invert3(c)
	for j := range nj {
		var sum [6]float64
		for i := range sum {
			sum[i] = inv[i] + m[j*6+i]
		}
		p, logDet := invert3(sum)
		copy(o.precision[j*6:], p[:])
		o.logOdds[j] = -(logDet + logDetC) / 2 // |I + C M| = |C| |C^-1 + M|
	}
	s.outflows = o
	return o
}

// line is the effect of one template on the targets, for one state:
// [0..blocks) what a unit of each block's strength adds to the posterior mean,
// [blocks] the pattern itself. Computed once, when first drawn.
func (e *Estimator) line(en *entry, s *state, o *outflows, j int) []float64 {
	if o.lines[j] != nil {
		return o.lines[j]
	}
	nt, w := len(e.targets), 2*len(en.live)
	out := make([]float64, (blocks+1)*nt)
	pattern := e.bank.atTarget[j*nt : (j+1)*nt]
	for b := range blocks {
		dst := out[b*nt : (b+1)*nt]
		for t := range nt {
			row := s.gain[t*en.n+b*w : t*en.n+(b+1)*w]
			dst[t] = float64(o.nowWeight[b]*pattern[t]) - blas64.Dot(vec(row), vec(en.bank[j*w:(j+1)*w]))
		}
	}
	copy(out[blocks*nt:], pattern)
	o.lines[j] = out
	return out
}

// strength is the posterior of one template's strength.
type strength struct {
	mean   [blocks]float64 // of the blocks' strengths, m/s
	share  [blocks]float64 // regression of the blocks' strengths on today's
	now    float64         // mean of today's strength before it is held positive, m/s
	spread float64         // its standard deviation, m/s
}

func (o *outflows) strength(j int, b [blocks]float64) strength {
	p := [6]float64(o.precision[j*6 : j*6+6])
	var s strength
	s.mean = mul3(p, b)
	pq := mul3(p, o.nowWeight)
	v := o.nowRest
	for i := range blocks {
		s.now += float64(o.nowWeight[i] * s.mean[i])
		v += float64(o.nowWeight[i] * pq[i])
	}
	for i := range blocks {
		s.share[i] = pq[i] / v
	}
	s.spread = math.Sqrt(v)
	return s
}

// invert3 inverts a symmetric positive definite 3x3 matrix packed as
// (00, 01, 02, 11, 12, 22) and gives the logarithm of its determinant.
func invert3(a [6]float64) (inv [6]float64, logDet float64) {
	c00 := float64(a[3]*a[5]) - float64(a[4]*a[4])
	c01 := float64(a[2]*a[4]) - float64(a[1]*a[5])
	c02 := float64(a[1]*a[4]) - float64(a[2]*a[3])
	det := float64(a[0]*c00) + float64(a[1]*c01) + float64(a[2]*c02)
	inv = [6]float64{
		c00 / det, c01 / det, c02 / det,
		(float64(a[0]*a[5]) - float64(a[2]*a[2])) / det,
		(float64(a[1]*a[2]) - float64(a[0]*a[4])) / det,
		(float64(a[0]*a[3]) - float64(a[1]*a[1])) / det,
	}
	return inv, math.Log(det)
}

// mul3 is a packed symmetric 3x3 matrix times a vector.
func mul3(a [6]float64, x [3]float64) [3]float64 {
	return [3]float64{
		float64(a[0]*x[0]) + float64(a[1]*x[1]) + float64(a[2]*x[2]),
		float64(a[1]*x[0]) + float64(a[3]*x[1]) + float64(a[4]*x[2]),
		float64(a[2]*x[0]) + float64(a[4]*x[1]) + float64(a[5]*x[2]),
	}
}
