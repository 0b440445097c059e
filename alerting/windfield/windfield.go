// Package windfield turns a Snapshot of mast winds into the wind, and its
// uncertainty, anywhere near the runway: joint draws of the headwind at fixed
// target points. Next: shear.
//
// The prior is a mixture. Around an unknown common mean the air is in one of a
// few ambient states (Gaussian processes of different strength, kernel.go), and
// an outflow of unknown place, size and strength (outflow.go) or a gust front
// (front.go) may lie over it, or one mast may be wrong (fault.go). Each step
// weighs the mixture by how well it explains the block means of all live masts;
// so calm air does not fill gaps with imagined shear, an onset is not smoothed
// away, and peaks between masts are restored.
package windfield

import (
	"math"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/blas/blas64"

	"sockline/sensors/averages"
)

// Draws is the number of joint draws that stand for the posterior.
const Draws = 128

// Mast is the place of a mast in the local plane, m. One that is Aloft stands
// above another on the same tower and takes no part.
type Mast struct {
	X, Y  float64
	Aloft bool
}

// Target is a point at which the headwind is wanted, in m, with the unit
// vector of the flight.
type Target struct{ X, Y, East, North float64 }

// Headwind of a wind (m/s) for the target's flight.
func (t Target) Headwind(east, north float64) float64 {
	return -(float64(east*t.East) + float64(north*t.North))
}

// Posterior is what one step knows. It is overwritten by the next Step.
type Posterior struct {
	Live         []int     // masts used, ascending
	Mean         []float64 // headwind at each target, m/s
	Draws        []float64 // [Draws][target] joint draws of it, m/s
	OutflowShare float64   // posterior probability that an outflow is under way
	FrontShare   float64   // posterior probability that a front is passing
	Doubt        []float64 // posterior probability that each mast is wrong
	// Alone is, for each mast, the odds that it is wrong from an even-handed prior,
	// or after a stroke of its instrument from what that says: above 1 its
	// neighbours contradict it, be it a fault or an outflow that no other feels.
	Alone []float64

	Kinds    [Draws]PatternKind // what lies over the ambient field in each draw
	Over     []Outflow          // [Draws] the outflow in each draw; Strength 0 without one
	Outflows []Outflow          // every outflow that is held possible
}

// PatternKind is what a draw takes to lie over the ambient field.
type PatternKind uint8

// The kinds of pattern.
const (
	NoPattern PatternKind = iota
	OutflowPattern
	FrontPattern
	FaultPattern
)

func kindOf(class int16) PatternKind {
	if class == derivedClass {
		return OutflowPattern
	}
	return PatternKind(class + 1)
}

// Estimator holds the gains and the little state that persists: the evidence
// for the ambient states over the last minutes. Not safe for concurrent use.
type Estimator struct {
	prior      Prior
	masts      []Mast
	targets    []Target
	layout     averages.Layout
	fields     []Field // the ambient states of the prior, then its disturbed ones
	ages       [blocks]float64
	outflows   *outflowBank
	fronts     *frontBank
	classes    []class        // outflows, fronts, faults
	normals    []float64      // [Draws][target] fixed standard normal draws
	order      [Draws]int     // which stored draw each draw uses
	levels     [Draws]float64 // probability level of each draw's strength
	scores     [Draws]float64 // the normal score of that level
	cache      cache
	fewerCache cache    // of Without
	known      []*known // by field; nil until wanted
	shared     *entry   // the masts of the newest entry, and the patterns at them
	memory     ambientMemory
	doubts     doubtMemory
	trail      trail
	derived    []derived         // outflows made for the step at hand ...
	children   []part            // ... and how likely they are beside the mixture
	pairings   []pairing         // by disturbed state
	faultGain  []float64         // log of each mast's prior of being wrong over the even-handed one ...
	faultOdds  []float64         // ... and the same by pattern
	remembered []float64         // what of it was remembered, and is no evidence of now
	struck     []averages.Stroke // the stroke of each mast that still counts

	// Scratch and result, sized once.
	live      []int
	steps     []uint8
	noise     []float64
	y         []float64
	solved    [][]float64 // [state] K^-1 y of the step
	w         []float64   // that of the state at hand
	b         [][]float64 // [class][strength][pattern]
	evidence  []float64   // per pattern of one class and state
	strong    []int       // the patterns among them that may count ...
	evident   []float64   // ... and their weights
	column    []float64
	effect    []float64
	plain     []float64 // posterior mean headwind of a state without a pattern
	base      []float64
	slope     []float64
	stateLog  []float64
	parts     []part
	faulty    []span // of parts: the faults on each state
	weights   []float64
	posterior Posterior
	fewer     Posterior // of Without; made when first asked for
	without   int       // the mast that is left out
	times     []float64
	bases     []float64
	sorted    []float64
}

// part is one component of the mixture after the step: an ambient state, with
// or without a pattern over it.
type part struct {
	state, class   int16 // class -1: none
	pattern        int32
	weight         float64
	now, sharpness float64 // today's strength before it is held positive, and 1 / (sqrt(2) its deviation)
}

// span of parts from first up to end.
type span struct{ first, end int }

// Where the outflows, the fronts and the faults stand among the classes.
const (
	outflowClass = 0
	frontClass   = 1
	faultClass   = 2
	derivedClass = 3 // outflows made for the step at hand: derived.go
)

// New prepares an estimator for masts and targets (m in one local plane).
func New(masts []Mast, targets []Target, layout averages.Layout, prior Prior) *Estimator {
	e := &Estimator{prior: prior, masts: masts, targets: targets, layout: layout}
	e.fields = slices.Concat(prior.Fields, prior.Disturbed)
	e.known = make([]*known, len(e.fields))
	for b := range blocks {
		e.ages[b] = layout.Age(b)
	}
	e.outflows = newOutflowBank(masts, targets, e.ages, prior)
	e.fronts = newFrontBank(masts, targets, e.ages, prior)
	e.classes = []class{e.outflows, e.fronts, &faultBank{masts: len(masts), deviation: prior.FaultDeviation}}
	e.normals = fixedNormals(len(targets))
	for d := range Draws {
		e.order[d] = reverseBits(d)
		e.levels[d] = float64((float64(reverseBits((37*d+11)%Draws)) + 0.5) / Draws)
		e.scores[d] = math.Sqrt2 * math.Erfinv(float64(2*e.levels[d])-1)
	}
	n, most, total := blocks*2*len(masts), 0, 0
	for _, c := range e.classes {
		most, total = max(most, c.count()), total+c.count()
		e.b = append(e.b, make([]float64, dims*c.count()))
	}
	e.cache, e.fewerCache = newCache(cacheSize), newCache(fewerSize(len(masts)))
	e.memory = newAmbientMemory(len(prior.Fields))
	e.doubts = newDoubtMemory(len(masts))
	e.trail = newTrail(e.outflows.templates, layout, prior)
	e.faultGain, e.remembered = make([]float64, len(masts)), make([]float64, len(masts))
	e.struck = make([]averages.Stroke, len(masts))
	e.faultOdds = make([]float64, e.classes[faultClass].count())
	e.noise = make([]float64, 0, blocks*blocks*len(masts))
	e.live = make([]int, 0, len(masts))
	e.steps = make([]uint8, 0, 2*len(masts)+1)
	e.y = make([]float64, n)
	for range e.fields {
		e.solved = append(e.solved, make([]float64, n))
	}
	e.evidence = make([]float64, most)
	e.strong, e.evident = make([]int, most), make([]float64, most)
	e.column = make([]float64, n)
	e.plain = make([]float64, len(targets))
	e.effect = make([]float64, len(targets))
	e.base = make([]float64, len(targets))
	e.slope = make([]float64, len(targets))
	e.stateLog = make([]float64, len(e.fields))
	e.weights = make([]float64, len(prior.Fields))
	e.parts, e.faulty = make([]part, 0, len(e.fields)*(total+1)), make([]span, 0, len(prior.Disturbed))
	for range prior.Disturbed {
		e.pairings = append(e.pairings, newPairing(e.outflows.count(), n))
	}
	e.newDerived()
	e.times = make([]float64, 0, len(masts))
	e.bases = make([]float64, 0, len(masts))
	e.posterior = newPosterior(len(masts), len(targets))
	e.without = noMast
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
	p := e.step(s)
	if p != nil {
		e.listOutflows()
	}
	return p
}

// step is Step, or Without when a mast is left out.
func (e *Estimator) step(s *averages.Snapshot) *Posterior {
	en := e.entryFor(s)
	if en == nil {
		return nil
	}
	e.observe(s, en)
	e.weigh(s, en)
	e.draw(en)
	e.posterior.Live = en.live
	return &e.posterior
}

// observe fills y: block-major, east and north of each live mast.
func (e *Estimator) observe(s *averages.Snapshot, en *entry) {
	e.y = e.y[:en.n]
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
func (e *Estimator) weigh(snapshot *averages.Snapshot, en *entry) {
	t := snapshot.At()
	ambient := len(e.prior.Fields)
	e.memory.shares(t, e.prior.LeastStateShare, e.weights)
	e.faultGains(snapshot)
	top := math.Inf(-1)
	for k, s := range en.states {
		e.solve(s)
		e.stateLog[k] = -(blas64.Dot(vec(e.y), vec(e.w)) + s.logDet) / 2
		if k < ambient {
			top = max(top, e.stateLog[k]+math.Log(e.weights[k]))
		}
	}
	e.parts, e.faulty, e.children, e.derived = e.parts[:0], e.faulty[:0], e.children[:0], e.derived[:0]
	total := 0.0
	e.trail.recall(t)
	keep := e.without == noMast && e.trail.wanted(t)
	if keep {
		clear(e.trail.sum)
	}
	plain := (1 - e.trail.share - e.trail.front) * (1 - e.prior.FaultShare)
	for k := range ambient {
		w := float64(plain * e.weights[k] * math.Exp(e.stateLog[k]-top))
		e.parts = append(e.parts, part{state: int16(k), class: -1, weight: w})
		total += w
	}
	undisturbed := total
	shares := [...]float64{e.trail.share, e.trail.front, evenHanded}
	var found [len(shares)]float64
	for k := ambient; k < len(en.states); k++ {
		e.use(en.states[k])
		var weights [len(shares)]float64
		var best [parents]int
		for c := range e.classes {
			w := e.weighPatterns(en, k, c, shares[c]/float64(len(e.prior.Disturbed)), top, total, keep)
			total += w
			found[c] += w
			weights[c] = w
			if c == outflowClass && keep {
				e.keepTrail(en, k, top)
			}
			if c == outflowClass && w > worthDeriving*total {
				best = e.likeliest() // the evidence is overwritten by the next class
			}
		}
		// Where a front explains as much, a stretched or second outflow would only
		// be a way to imitate it.
		if w := weights[outflowClass]; e.without == noMast && w > worthDeriving*total && w > weights[frontClass] {
			e.derive(en, k, best, e.trail.share/float64(len(e.prior.Disturbed)), top)
		}
	}
	// A state of the air is judged by what it explains with or without a
	// pattern, so that an outflow does not pass for restless air afterwards.
	patterned := found[0] + found[1] + found[2]
	for k := range ambient {
		e.stateLog[k] = math.Log(float64(plain*math.Exp(e.stateLog[k]-top)) + patterned)
	}
	if e.without == noMast {
		e.memory.remember(t, e.stateLog[:ambient])
	}
	if keep {
		none := (undisturbed + found[faultClass]) / (1 - e.trail.share - e.trail.front)
		e.trail.remember(t, none, found[frontClass]/e.trail.front, snapshot, en.live)
	}
	for i := range e.parts {
		e.parts[i].weight /= total
	}
	for i := range e.children {
		e.children[i].weight /= total
	}
	e.posterior.OutflowShare = found[0] / total
	e.posterior.FrontShare = found[1] / total
	e.doubt()
	if e.without == noMast {
		e.doubts.remember(t, e.posterior.Alone)
	}
}

// doubt fills the probability that each mast is wrong.
func (e *Estimator) doubt() {
	p := &e.posterior
	clear(p.Doubt)
	for _, f := range e.faulty {
		for _, pt := range e.parts[f.first:f.end] {
			p.Doubt[int(pt.pattern)%len(p.Doubt)] += pt.weight
		}
	}
	for i, d := range p.Doubt {
		p.Alone[i] = d / math.Max(1-d, 1e-12) * math.Exp(-e.remembered[i])
	}
}

// solve fills w = K^-1 y of a state.
func (e *Estimator) solve(s *state) {
	e.use(s)
	multiply(s, e.y, e.w)
}

// use takes up w of a state again that was solved in this step.
func (e *Estimator) use(s *state) { e.w = e.solved[s.field][:len(e.y)] }

// multiply fills out with K^-1 x; K^-1 is its own transpose.
func multiply(s *state, x, out []float64) { columns(out, s.inverse, x) }

// A pattern is left out when its share of the whole mixture is below
// negligible (a few thousand of them together then hold less than one draw),
// or when it explains the observations worse than the best of its class by
// more than the factor exp(hopeless).
const (
	negligible = 2e-6
	hopeless   = 9
)

// weighPatterns appends the patterns of class c that matter on top of state k
// and gives their summed weight. w holds K^-1 y; share is the prior of the
// class on this state, total the weight found so far.
func (e *Estimator) weighPatterns(en *entry, k, c int, share, top, total float64, keep bool) float64 {
	s := en.states[k]
	p := e.patternsFor(en, s, c)
	n, b := e.classes[c].count(), e.b[c]
	if n == 0 {
		return 0
	}
	scale := math.Log(share/float64(n)) + (e.stateLog[k] - top)
	// The factor for a positive strength is at most 2.
	least := math.Log(negligible*total) - scale - math.Ln2
	if c == faultClass {
		least = math.Inf(-1) // few, and what their neighbours say of each is told
	}
	// Nobody may look at the evidence of a class that is passed over: it is that
	// of another state.
	above := 0.0
	if c == outflowClass {
		above = e.trail.most
	}
	if c != faultClass && !keep && p.most(e.y, e.w)+above < least {
		return 0
	}
	e.classes[c].project(en, e.w, b)
	evidence := e.evidence[:n]
	var extra []float64
	switch c {
	case faultClass:
		extra = e.faultOdds
		for j := range extra {
			extra[j] = e.faultGain[j%len(e.faultGain)] + e.strokeGain(en, p, j)
		}
	case outflowClass:
		extra = e.trail.odds
	}
	fit, best := explain(evidence, b, p.precision, p.logOdds, extra)
	p.remember(e.y, e.w, fit)
	if best < least {
		return 0
	}
	return e.count(p, k, c, max(least, best-hopeless), scale)
}

// count appends the patterns of class c on state k whose evidence is at least
// least, and gives their summed weight. b and evidence are those of the class.
func (e *Estimator) count(p *patterns, k, c int, least, scale float64) float64 {
	n, b := e.classes[c].count(), e.b[c]
	// Which of them it is cannot be foretold: to write all down and to go on only
	// after those that count is quicker than to branch.
	strong, found := e.strong[:n], 0
	for j, l := range e.evidence[:n] {
		strong[found] = j
		found += counts(l, least)
	}
	strong = strong[:found]
	weights := e.evident[:found]
	for i, j := range strong {
		weights[i] = e.evidence[j] + scale
	}
	exponentials(weights)
	sum, first := 0.0, len(e.parts)
	for i, j := range strong {
		now := p.strengthNow(j, b[j], b[n+j], b[2*n+j])
		// A positive strength puts twice its posterior probability on the evidence.
		weight := float64(weights[i] * math.Erfc(-now*p.sharpness[j]))
		sum += weight
		e.parts = append(e.parts, part{state: int16(k), class: int16(c), pattern: int32(j), weight: weight, now: now, sharpness: p.sharpness[j]})
	}
	if c == faultClass {
		e.faulty = append(e.faulty, span{first, len(e.parts)})
	}
	return sum
}

// counts is 1 where l is at least least, otherwise 0.
func counts(l, least float64) int {
	if l >= least {
		return 1
	}
	return 0
}
