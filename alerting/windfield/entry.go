package windfield

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
	"gonum.org/v1/gonum/lapack/lapack64"

	"sockline/sensors/averages"
)

const blocks = averages.Blocks

// entry is everything that follows from which masts are live and how noisy
// their means are, and not from what they say: one set of gains for each
// ambient state. Entries are cached.
type entry struct {
	live     []int     // masts in use, ascending
	n        int       // observations: blocks x live x 2, block-major
	noise    []float64 // [block][live] error variance of one component, m2/s2
	outflows []float64 // unit winds of every outflow at the live masts; see outflowBank.atLive
	fronts   []float64 // the same of every front; see frontBank.atLive
	// The same again, patterns innermost; see the banks' project.
	outflowColumns, frontColumns []float64
	states                       []*state
}

// state holds the gains of one ambient state.
type state struct {
	field    int         // which of the fields
	inverse  []float64   // n x n, K^-1
	logDet   float64     // of K
	gain     []float64   // n x targets: posterior mean headwind = y . gain; nil until wanted, with the factor
	factor   []float64   // targets x targets lower factor of the posterior covariance
	noise    []float64   // draws x targets: fixed draws of the posterior error; nil until wanted
	patterns []*patterns // by class; nil until wanted
}

// newEntry computes the gains for one set of live masts and noise.
func (e *Estimator) newEntry(live []int, noise []float64) (*entry, error) {
	n := blocks * len(live) * 2
	en := &entry{
		live:  append([]int(nil), live...),
		noise: append([]float64(nil), noise...),
		n:     n,
	}
	e.atLive(en)
	en.states = make([]*state, len(e.fields))
	for k := range e.fields {
		s, err := e.newState(en, k)
		if err != nil {
			return nil, fmt.Errorf("state %d of the air with %d masts: %w", k, len(live), err)
		}
		en.states[k] = s
	}
	return en, nil
}

// meanCovariance is the prior covariance of the common mean wind, one
// component, over dt seconds.
func (p *Prior) meanCovariance(dt float64) float64 {
	return float64(p.MeanDeviation*p.MeanDeviation) +
		float64(float64(p.DriftDeviation*p.DriftDeviation)*math.Exp(-dt/p.DriftTime))
}

// atLive fills in the unit winds of all patterns at the live masts; entries with
// the same live masts as the one before share them.
func (e *Estimator) atLive(en *entry) {
	old := e.shared
	if old == nil || !slices.Equal(old.live, en.live) {
		old = &entry{live: en.live, outflows: e.outflows.atLive(en.live), fronts: e.fronts.atLive(en.live)}
		old.outflowColumns = transposed(old.outflows, e.outflows.count(), 2*len(en.live))
		old.frontColumns = e.fronts.columns(old.fronts)
		e.shared = old
	}
	en.outflows, en.outflowColumns = old.outflows, old.outflowColumns
	en.fronts, en.frontColumns = old.fronts, old.frontColumns
}

func (e *Estimator) newState(en *entry, field int) (*state, error) {
	n, nl := en.n, len(en.live)
	f, known := e.fields[field], e.covariances(field)
	k := make([]float64, n*n)
	for b := range blocks {
		for c := range blocks {
			dt := math.Abs(e.ages[b] - e.ages[c])
			mean := e.prior.meanCovariance(dt)
			fade := math.Exp(-dt / f.Time)
			for i, mi := range en.live {
				for j, mj := range en.live {
					ee, eno, nn := known.masts[mi*len(e.masts)+mj].components()
					r, q := (b*nl+i)*2, (c*nl+j)*2
					k[r*n+q] = mean + float64(fade*ee)
					k[r*n+q+1] = float64(fade * eno)
					k[(r+1)*n+q] = float64(fade * eno)
					k[(r+1)*n+q+1] = mean + float64(fade*nn)
				}
			}
		}
	}
	for i := range nl {
		for b := range blocks {
			for c := range blocks {
				v := en.noise[(i*blocks+b)*blocks+c]
				r, q := (b*nl+i)*2, (c*nl+i)*2
				k[r*n+q] += v
				k[(r+1)*n+q+1] += v
			}
		}
	}
	s := &state{field: field, patterns: make([]*patterns, len(e.classes))}
	tri, ok := lapack64.Potrf(blas64.Symmetric{Uplo: blas.Upper, N: n, Data: k, Stride: n})
	if !ok {
		return nil, fmt.Errorf("the covariance of the means is not positive definite")
	}
	for i := range n {
		s.logDet += 2 * math.Log(tri.Data[i*n+i])
	}
	lapack64.Potri(tri)
	for i := range n {
		for j := range i {
			k[i*n+j] = k[j*n+i]
		}
	}
	s.inverse = k
	return s, nil
}

// addGain computes the posterior of the headwind at every target, its gain on
// the observations and the factor of its covariance, when the state is first
// drawn: most states of an entry never are.
func (e *Estimator) addGain(en *entry, s *state) {
	if s.gain != nil {
		return
	}
	n, nl, nt := en.n, len(en.live), len(e.targets)
	f, known := e.fields[s.field], e.covariances(s.field)
	cross := make([]float64, nt*n)
	for t, g := range e.targets {
		for b := range blocks {
			dt := e.ages[b]
			mean := e.prior.meanCovariance(dt)
			fade := math.Exp(-dt / f.Time)
			for i, m := range en.live {
				ee, eno, nn := known.cross[t*len(e.masts)+m].components()
				o := t*n + (b*nl+i)*2
				cross[o] = g.Headwind(mean+float64(fade*ee), float64(fade*eno))
				cross[o+1] = g.Headwind(float64(fade*eno), mean+float64(fade*nn))
			}
		}
	}
	gain := make([]float64, nt*n)
	product(gain, cross, s.inverse, nt)
	s.gain = transposed(gain, nt, n)
	cov := slices.Clone(known.targets)
	explained := make([]float64, nt*nt)
	product(explained, gain, transposed(cross, nt, n), nt)
	for i, v := range explained {
		cov[i] -= v
	}
	// Jitter: the posterior covariance is singular to rounding where a target
	// stands beside a mast.
	jitter := 1e-6 + float64(1e-6*float64(f.Deviation*f.Deviation))
	for tries := 0; ; tries++ {
		work := slices.Clone(cov)
		for i := range nt {
			work[i*nt+i] += jitter
		}
		if _, ok := lapack64.Potrf(blas64.Symmetric{Uplo: blas.Lower, N: nt, Data: work, Stride: nt}); ok || tries == 6 {
			s.factor = work
			return
		}
		jitter *= 10
	}
}

// draws are the fixed draws of the posterior error of every target, in m/s:
// factor . z with the stored normal draws z.
func (e *Estimator) draws(s *state) []float64 {
	if s.noise == nil {
		nt := len(e.targets)
		s.noise = make([]float64, Draws*nt)
		across := transposed(s.factor, nt, nt)
		for i := range nt { // below its diagonal it is no part of the factor
			clear(across[i*nt : i*nt+i])
		}
		product(s.noise, e.normals, across, Draws)
	}
	return s.noise
}

func mat(rows, cols int, data []float64) blas64.General {
	return blas64.General{Rows: rows, Cols: cols, Stride: cols, Data: data}
}

func vec(data []float64) blas64.Vector { return blas64.Vector{N: len(data), Inc: 1, Data: data} }
