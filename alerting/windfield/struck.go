package windfield

import "math"

// A mast that changed at one stroke is wrong by just that stroke, if it is wrong:
// its error is what the stroke made of the wind that it tells, within what a few
// seconds of gusty air leave open, and no longer anything at all. What speaks for
// the air is any other error.

// mistake is what is believed of the error of one mast: each component normal about
// its mean, m/s.
type mistake struct {
	mean     [2]float64
	variance float64 // of a component, m2/s2
}

// strokeSpread is by how much of the wind the error of a stroke may be off, and
// strokeLeast what it may be off besides, m/s.
const (
	strokeSpread = 0.25
	strokeLeast  = 1.0
)

// strokeError is the error of a mast by its last stroke, over the blocks that
// pattern j of the faults holds wrong; false without a stroke.
func (e *Estimator) strokeError(en *entry, j int) (mistake, bool) {
	mast := j % len(e.masts)
	k := &e.struck[mast]
	i := place(en, mast)
	if k.At == 0 || i < 0 {
		return mistake{}, false
	}
	n := newest(j, len(e.masts))
	var east, north float64
	for b := range n {
		o := (b*len(en.live) + i) * 2
		east += e.y[o] / float64(n)
		north += e.y[o+1] / float64(n)
	}
	x, y := k.Undone(east, north)
	off := strokeSpread * math.Hypot(x, y)
	return mistake{mean: [2]float64{east - x, north - y}, variance: float64(strokeLeast*strokeLeast) + float64(off*off)}, true
}

// strokeGain is the logarithm of the evidence of pattern j of the faults if the
// error of its mast is that of its stroke, over that of any error; 0 without a stroke.
func (e *Estimator) strokeGain(en *entry, p *patterns, j int) float64 {
	struck, ok := e.strokeError(en, j)
	if !ok {
		return 0
	}
	free := e.anyError()
	n, all := e.classes[faultClass].count(), e.b[faultClass]
	b := [2]float64{all[j], all[n+j]}
	m := free.information(p, j)
	return struck.evidence(m, b) - free.evidence(m, b)
}

// anyError is what is believed of the error of a mast without a stroke.
func (e *Estimator) anyError() mistake {
	return mistake{variance: float64(e.prior.FaultDeviation * e.prior.FaultDeviation)}
}

// information is M = Phi' K^-1 Phi of pattern j of the faults, whose patterns were
// made with the prior w: M00, M01, M11.
func (w mistake) information(p *patterns, j int) [3]float64 {
	return [3]float64{p.inverse[j*6] - 1/w.variance, p.inverse[j*6+1], p.inverse[j*6+3] - 1/w.variance}
}

// posterior is the mean of the error given b = Phi' K^-1 y, and the determinant
// of its inverse covariance S = M + I/v: S^-1 (b + mean/v).
func (w mistake) posterior(m [3]float64, b [2]float64) (mean [2]float64, det float64) {
	s00, s01, s11 := m[0]+1/w.variance, m[1], m[2]+1/w.variance
	h0, h1 := b[0]+w.mean[0]/w.variance, b[1]+w.mean[1]/w.variance
	det = float64(s00*s11) - float64(s01*s01)
	return [2]float64{
		(float64(s11*h0) - float64(s01*h1)) / det,
		(float64(s00*h1) - float64(s01*h0)) / det,
	}, det
}

// evidence is log p(y | error) - log p(y): with h = b + mean/v,
// 1/2 h' S^-1 h - 1/2 mean' mean / v - 1/2 log(v^2 |S|).
func (w mistake) evidence(m [3]float64, b [2]float64) float64 {
	v := w.variance
	mean, det := w.posterior(m, b)
	h0, h1 := b[0]+w.mean[0]/v, b[1]+w.mean[1]/v
	return float64((float64(h0*mean[0])+float64(h1*mean[1]))/2) -
		(float64(w.mean[0]*w.mean[0])+float64(w.mean[1]*w.mean[1]))/(2*v) - float64(math.Log(float64(v*v)*det)/2)
}
