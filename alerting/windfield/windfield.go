// Package windfield turns a Snapshot of mast winds into the wind, and its
// uncertainty, anywhere near the runway: joint draws of the headwind at fixed
// target points. Next: shear.
//
// The prior is a mixture. Around an unknown common mean the air is in one of a
// few ambient states (Gaussian processes of different strength, kernel.go), and
// an outflow of unknown place, size and strength may lie over it (bank.go,
// outflow.go). Each step weighs the mixture by how well it explains the block
// means of all live masts; so calm air does not fill gaps with imagined shear,
// an onset is not smoothed away, and peaks between masts are restored.
package windfield

import (
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"

	"sockline/sensors"
	"sockline/sensors/averages"
)

// Draws is the number of joint draws that stand for the posterior.
const Draws = 128

// Mast is the place of a mast in the local plane, m.
type Mast struct{ X, Y float64 }

// Target is a point at which the headwind is wanted, in m, with the unit
// vector of the flight.
type Target struct{ X, Y, East, North float64 }

// headwind of a wind (m/s) for the target's flight.
func (t Target) headwind(east, north float64) float64 {
	return -(float64(east*t.East) + float64(north*t.North))
}

// Posterior is what one step knows. It is overwritten by the next Step.
type Posterior struct {
	Live         []int     // masts used, ascending
	Mean         []float64 // headwind at each target, m/s
	Draws        []float64 // [Draws][target] joint draws of it, m/s
	OutflowShare float64   // posterior probability that an outflow is under way
}

// Estimator holds the gains and the little state that persists: the evidence
// for the ambient states over the last minutes. Not safe for concurrent use.
type Estimator struct {
	prior   Prior
	masts   []Mast
	targets []Target
	layout  averages.Layout
	ages    [blocks]float64
	bank    *bank
	normals []float64 // [Draws][target] fixed standard normal draws
	order   [Draws]int
	cache   cache
	memory  ambientMemory

	// Scratch and result, sized once.
	live      []int
	steps     []uint8
	noise     []float64
	y         []float64
	w         []float64
	b         []float64 // [template][block]
	evidence  []float64 // per template of one state
	base      []float64
	slope     []float64
	stateLog  []float64
	parts     []part
	weights   []float64
	posterior Posterior
	times     []float64
	bases     []float64
	sorted    []float64
}

// part is one component of the mixture after the step: an ambient state, with
// or without an outflow template.
type part struct {
	state    int
	template int // -1: none
	weight   float64
}

// New prepares an estimator for masts and targets (m in one local plane).
func New(masts []Mast, targets []Target, layout averages.Layout, prior Prior) *Estimator {
	e := &Estimator{prior: prior, masts: masts, targets: targets, layout: layout}
	for b := range blocks {
		e.ages[b] = layout.Age(b)
	}
	e.bank = newBank(masts, targets, prior)
	e.normals = fixedNormals(len(targets))
	for d := range Draws {
		e.order[d] = reverseBits(d)
	}
	nj, n := len(e.bank.templates), blocks*2*len(masts)
	e.cache = newCache()
	e.memory = newAmbientMemory(len(prior.Fields))
	e.noise = make([]float64, 0, blocks*len(masts))
	e.live = make([]int, 0, len(masts))
	e.steps = make([]uint8, 0, 2*len(masts)+1)
	e.y = make([]float64, n)
	e.w = make([]float64, n)
	e.b = make([]float64, blocks*nj)
	e.evidence = make([]float64, nj)
	e.base = make([]float64, len(targets))
	e.slope = make([]float64, len(targets))
	e.stateLog = make([]float64, len(prior.Fields))
	e.weights = make([]float64, len(prior.Fields))
	e.parts = make([]part, 0, len(prior.Fields)*(nj+1))
	e.times = make([]float64, 0, len(masts))
	e.bases = make([]float64, 0, len(masts))
	e.posterior.Mean = make([]float64, len(targets))
	e.posterior.Draws = make([]float64, Draws*len(targets))
	return e
}

// fixedNormals are standard normal draws in antithetic pairs from a fixed
// seed, so that the same input gives the same output for ever.
func fixedNormals(targets int) []float64 {
	rng := rand.New(rand.NewPCG(0x736f636b, 0x6c696e65))
	out := make([]float64, Draws*targets)
	for t := range targets {
		for d := 0; d < Draws; d += 2 {
			z := rng.NormFloat64()
			out[d*targets+t] = z
			out[(d+1)*targets+t] = -z
		}
	}
	return out
}

// reverseBits is the van der Corput order of 0..Draws-1 (J.G. van der Corput,
// "Verteilungsfunktionen", Proc. Akad. Amsterdam 38, 1935; from memory): any
// run of it is spread evenly.
func reverseBits(d int) int {
	r := 0
	for bit := 1; bit < Draws; bit <<= 1 {
		r <<= 1
		if d&bit != 0 {
			r |= 1
		}
	}
	return r
}

// Step is the posterior for a snapshot; nil when no mast is live or the
// observations cannot be used (never for masts at different places).
func (e *Estimator) Step(s *averages.Snapshot) *Posterior {
	en := e.entryFor(s)
	if en == nil {
		return nil
	}
	e.observe(s, en)
	e.weigh(s.At(), en)
	e.draw(en)
	e.posterior.Live = en.live
	return &e.posterior
}

// observe fills y: block-major, east and north of each live mast.
func (e *Estimator) observe(s *averages.Snapshot, en *entry) {
	e.y = e.y[:en.n]
	e.w = e.w[:en.n]
	nl := len(en.live)
	for i, m := range en.live {
		mast := s.Mast(m)
		for b := range blocks {
			o := (b*nl + i) * 2
			blk := &mast.Blocks[b]
			if !blk.Present { // its noise is as good as infinite: any value will do
				blk = &mast.Blocks[0]
			}
			e.y[o], e.y[o+1] = blk.East, blk.North
		}
	}
}

// weigh fills parts with every component whose weight matters, in a fixed
// order, and normalises.
func (e *Estimator) weigh(t sensors.Instant, en *entry) {
	e.memory.shares(t, e.prior.LeastStateShare, e.weights)
	for k, s := range en.states {
		blas64.Symv(1, blas64.Symmetric{Uplo: blas.Upper, N: en.n, Data: s.inverse, Stride: en.n}, vec(e.y), 0, vec(e.w))
		e.stateLog[k] = -(blas64.Dot(vec(e.y), vec(e.w)) + s.logDet) / 2
	}
	top := math.Inf(-1)
	for k, l := range e.stateLog {
		top = math.Max(top, l+math.Log(e.weights[k]))
	}
	e.parts = e.parts[:0]
	total, withOutflow := 0.0, 0.0
	for k := range en.states {
		w := (1 - e.prior.OutflowShare) * e.weights[k] * math.Exp(e.stateLog[k]-top)
		e.parts = append(e.parts, part{state: k, template: -1, weight: w})
		total += w
	}
	for k, s := range en.states {
		if k >= e.prior.OutflowFieldsBelow || e.weights[k] < 2*e.prior.LeastStateShare {
			continue
		}
		w := e.weighOutflows(en, s, k, top, total)
		total += w
		withOutflow += w
		e.stateLog[k] += math.Log1p(w / e.parts[k].weight)
	}
	e.memory.remember(t, e.stateLog)
	for i := range e.parts {
		e.parts[i].weight /= total
	}
	e.posterior.OutflowShare = withOutflow / total
}

// negligible is the share of the whole mixture below which a part is left out.
const negligible = 1e-5

// weighOutflows appends the templates that matter on top of state k and gives
// their summed weight. total is the weight found so far.
func (e *Estimator) weighOutflows(en *entry, s *state, k int, top, total float64) float64 {
	o := e.outflows(en, s)
	blas64.Symv(1, blas64.Symmetric{Uplo: blas.Upper, N: en.n, Data: s.inverse, Stride: en.n}, vec(e.y), 0, vec(e.w))
	nj, w := len(e.bank.templates), 2*len(en.live)
	// b = bank . w_b for each block: the projections of the observations.
	for b := range blocks {
		blas64.Gemv(blas.NoTrans, 1, mat(nj, w, en.bank), vec(e.w[b*w:(b+1)*w]), 0,
			blas64.Vector{N: nj, Inc: 1, Data: e.b[b*nj : (b+1)*nj]})
	}
	best := math.Inf(-1)
	for j := range nj {
		b0, b1, b2 := e.b[j], e.b[nj+j], e.b[2*nj+j]
		p := o.precision[j*6 : j*6+6]
		q := float64(p[0]*float64(b0*b0)) + float64(p[3]*float64(b1*b1)) + float64(p[5]*float64(b2*b2)) +
			2*(float64(p[1]*float64(b0*b1))+float64(p[2]*float64(b0*b2))+float64(p[4]*float64(b1*b2)))
		e.evidence[j] = q/2 + o.logOdds[j]
		best = math.Max(best, e.evidence[j])
	}
	each := e.prior.OutflowShare * e.weights[k] / float64(nj)
	scale := math.Log(each) + (e.stateLog[k] - top)
	// The factor for a positive strength is at most 2.
	least := math.Log(negligible*total/float64(nj)) - scale - math.Ln2
	if best < least {
		return 0
	}
	least = math.Max(least, best-14)
	sum := 0.0
	for j, l := range e.evidence {
		if l < least {
			continue
		}
		st := o.strength(j, [blocks]float64{e.b[j], e.b[nj+j], e.b[2*nj+j]})
		// Half-normal prior on today's strength: twice the posterior mass above 0.
		weight := math.Exp(l+scale) * math.Erfc(-st.now/(st.spread*math.Sqrt2))
		sum += weight
		e.parts = append(e.parts, part{state: k, template: j, weight: weight})
	}
	return sum
}

// draw fills the posterior: each draw takes the part that its place in the
// cumulative weights falls on, that part's mean, and a stored draw of its
// error.
func (e *Estimator) draw(en *entry) {
	nt := len(e.targets)
	p := &e.posterior
	for t := range p.Mean {
		p.Mean[t] = 0
	}
	cum, i := e.parts[0].weight, 0
	current := -1
	var st strength
	lastState := -1
	for d := range Draws {
		u := (float64(d) + 0.5) / Draws
		for u > cum && i < len(e.parts)-1 {
			i++
			cum += e.parts[i].weight
		}
		s := en.states[e.parts[i].state]
		if i != current {
			if lastState != e.parts[i].state {
				lastState = e.parts[i].state
				blas64.Symv(1, blas64.Symmetric{Uplo: blas.Upper, N: en.n, Data: s.inverse, Stride: en.n}, vec(e.y), 0, vec(e.w))
			}
			st = e.shape(en, s, e.parts[i].template)
			current = i
		}
		row := p.Draws[d*nt : (d+1)*nt]
		z := e.draws(s)[e.order[d]*nt : (e.order[d]+1)*nt]
		excess := 0.0
		if e.parts[i].template >= 0 {
			excess = positiveNormal(st.now, st.spread, (float64(reverseBits((d*37+11)%Draws))+0.5)/Draws) - st.now
		}
		for t := range row {
			v := e.base[t] + float64(excess*e.slope[t]) + z[t]
			row[t] = v
			p.Mean[t] += v
		}
	}
	for t := range p.Mean {
		p.Mean[t] /= Draws
	}
}

// shape fills base (posterior mean headwind) and slope (what one more m/s of
// outflow adds) for a part, and gives the strength of its outflow.
func (e *Estimator) shape(en *entry, s *state, template int) strength {
	nt, w := len(e.targets), 2*len(en.live)
	blas64.Gemv(blas.NoTrans, 1, mat(nt, en.n, s.gain), vec(e.y), 0, vec(e.base))
	if template < 0 {
		for t := range e.slope {
			e.slope[t] = 0
		}
		return strength{}
	}
	o := e.outflows(en, s)
	pattern := en.bank[template*w : (template+1)*w]
	var b [blocks]float64
	for k := range blocks {
		b[k] = blas64.Dot(vec(pattern), vec(e.w[k*w:(k+1)*w]))
	}
	st := o.strength(template, b)
	line := e.line(en, s, o, template)
	rest := 1.0
	for k := range blocks {
		rest -= float64(o.nowWeight[k] * st.share[k])
	}
	for t := range nt {
		base, slope := e.base[t], float64(rest*line[blocks*nt+t])
		for k := range blocks {
			base += float64(st.mean[k] * line[k*nt+t])
			slope += float64(st.share[k] * line[k*nt+t])
		}
		e.base[t], e.slope[t] = base, slope
	}
	return st
}

// positiveNormal is the point of N(mean, sd) held above 0 with the probability
// u below it.
func positiveNormal(mean, sd, u float64) float64 {
	below := math.Erfc(mean/(sd*math.Sqrt2)) / 2
	p := below + float64(u*(1-below))
	p = min(max(p, 1e-12), 1-1e-12)
	return math.Max(mean+float64(sd*math.Sqrt2)*math.Erfinv(2*p-1), 0)
}
