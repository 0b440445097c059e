package windfield

import (
	"math"
	"slices"

	"sockline/sensors/averages"
)

// The error variance of a mast's newest block mean is rounded to one of these
// steps, so that the gains, which depend on it, can be kept. A step is 1.6
// times the one before: the estimate itself, from ten minutes of wind, is no
// better than that.
const (
	noiseSteps     = 12
	noiseLeast     = 0.04 // m2/s2
	noiseRatio     = 1.6
	absentVariance = 1e6 // m2/s2: a block without data
	// oddOneOut: a mast keeps its own noise step only if its variance differs
	// from the masts' median by more than this factor; otherwise the median,
	// which is the better estimate, serves.
	oddOneOut = 2.2
)

// timeSteps are the integral times (s) that the masts' median is rounded to.
var timeSteps = [...]float64{2.5, 4, 6.3, 10, 16}

const (
	cacheSize = 24
	// mostFewer bounds the entries kept for when a mast is left out: with more
	// masts than that they would come round too late, and are large.
	mostFewer = 20
)

// cache keeps the entries used last.
type cache struct {
	size    int
	entries map[string]*cached
	clock   uint64
}

type cached struct {
	entry *entry
	used  uint64
}

func newCache(size int) cache {
	return cache{size: size, entries: make(map[string]*cached, size+1)}
}

// fewerSize is how many entries are kept for when one of the masts is left out:
// each in turn, and some for when the noise has changed.
func fewerSize(masts int) int {
	if size := masts + 3; size <= mostFewer {
		return size
	}
	return 1
}

func (c *cache) get(key []uint8) *entry {
	kept, ok := c.entries[string(key)]
	if !ok {
		return nil
	}
	c.clock++
	kept.used = c.clock
	return kept.entry
}

func (c *cache) put(key string, en *entry) {
	if len(c.entries) >= c.size {
		oldest := ""
		least := uint64(math.MaxUint64)
		for k, v := range c.entries { // uses are unique: the order of the map does not matter
			if v.used < least {
				oldest, least = k, v.used
			}
		}
		delete(c.entries, oldest)
	}
	c.clock++
	c.entries[key] = &cached{entry: en, used: c.clock}
}

// entryFor finds or makes the gains for the live masts and their noise.
func (e *Estimator) entryFor(s *averages.Snapshot) *entry {
	e.live, e.bases, e.times = e.live[:0], e.bases[:0], e.times[:0]
	for i := range e.masts {
		m := s.Mast(i)
		if m.State != averages.Live || e.masts[i].Aloft {
			continue
		}
		speed := e.recentSpeed(m)
		t := m.Turbulence.In(speed)
		if t.Seconds == 0 {
			t = averages.Expected(speed)
		}
		e.live = append(e.live, i)
		e.bases = append(e.bases, t.MeanVariance(float64(e.layout.Seconds[0])))
		e.times = append(e.times, t.Time)
	}
	if len(e.live) == 0 {
		return nil
	}
	e.steps = e.steps[:0]
	timeStep := nearestTime(e.median(e.times))
	e.steps = append(e.steps, uint8(timeStep))
	middle := e.median(e.bases)
	for i, m := range e.live {
		base := e.bases[i]
		if base < middle*oddOneOut && base > middle/oddOneOut {
			base = middle
		}
		mast := s.Mast(m)
		mask := uint8(0)
		for b := range blocks {
			if !mast.Blocks[b].Present || m == e.without {
				mask |= 1 << b
			}
		}
		e.steps = append(e.steps, uint8(m), noiseStep(base)|mask<<4)
	}
	kept := &e.cache
	if e.without != noMast { // apart: the cache is for the steps that decide
		kept = &e.fewerCache
	}
	if en := kept.get(e.steps); en != nil {
		return en
	}
	en, err := e.newEntry(e.live, e.blockNoise(timeStep))
	if err != nil { // two masts in one place and no noise: excluded by the floor of the noise
		return nil
	}
	kept.put(string(e.steps), en)
	return en
}

// recentSpeed is the wind of a mast over all its blocks, m/s.
func (e *Estimator) recentSpeed(m *averages.Mast) float64 {
	sum, seconds := 0.0, 0.0
	for b := range blocks {
		if m.Blocks[b].Present {
			w := float64(e.layout.Seconds[b])
			sum += float64(w * math.Hypot(m.Blocks[b].East, m.Blocks[b].North))
			seconds += w
		}
	}
	return sum / seconds // a live mast has its first block
}

// blockNoise is the error covariance of the block means of every live mast,
// [live][block][block], from the rounded steps alone. Turbulence outlives a
// block, so the errors of neighbouring blocks are correlated; taken for
// independent they would pass for a wind field that stays.
func (e *Estimator) blockNoise(timeStep int) []float64 {
	e.noise = e.noise[:0]
	unit := averages.Turbulence{Variance: 1, Time: timeSteps[timeStep]}
	first := unit.MeanVariance(float64(e.layout.Seconds[0]))
	instrument := float64(e.prior.Instrument * e.prior.Instrument)
	for i := range e.live {
		step := e.steps[2+2*i]
		scale := noiseLeast * math.Pow(noiseRatio, float64(step&15)) / first
		for b := range blocks {
			for c := range blocks {
				v := float64(scale*e.layout.Covariance(unit, b, c)) + instrument
				if b == c && step>>4&(1<<b) != 0 {
					v += absentVariance
				}
				e.noise = append(e.noise, v)
			}
		}
	}
	return e.noise
}

func noiseStep(variance float64) uint8 {
	s := math.Round(math.Log(variance/noiseLeast) / math.Log(noiseRatio))
	return uint8(min(max(s, 0), noiseSteps-1))
}

func nearestTime(t float64) int {
	best := 0
	for i, v := range timeSteps {
		if math.Abs(math.Log(t/v)) < math.Abs(math.Log(t/timeSteps[best])) {
			best = i
		}
	}
	return best
}

// median of values, which are left as they are.
func (e *Estimator) median(values []float64) float64 {
	e.sorted = append(e.sorted[:0], values...)
	slices.Sort(e.sorted)
	n := len(e.sorted)
	return (e.sorted[(n-1)/2] + e.sorted[n/2]) / 2
}
