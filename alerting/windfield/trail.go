package windfield

import (
	"math"
	"slices"

	"sockline/sensors"
	"sockline/sensors/averages"
)

// trail holds what the last minutes said of each outflow of the bank, so that one
// that drifts between two masts, or over one that then feels nothing, is not
// forgotten. The belief before a step is that of a hidden Markov chain
// (L.R. Rabiner, "A tutorial on hidden Markov models and selected applications in
// speech recognition", Proc. IEEE 77, 1989, the forward recursion; from memory)
// whose states are the templates, a front and neither, in strides as long as the
// blocks reach back: no mean counts twice. An outflow moves with the wind and fades
// within minutes, a front passes, and now and then a new one of either comes. The chain is begun afresh from a
// finite ring on a UTC grid, so that what is believed now depends on nothing
// older and is the same in every replay.
type trail struct {
	prior     Prior
	templates int
	each      int                 // templates of one centre
	cells     []cell              // of every centre
	at        []int               // centre of each cell of the grid, -1: none
	columns   int                 // of the grid
	log       []float32           // [slot][template] log evidence over that of neither outflow nor front
	fronts    [trailSlots]float64 // the same of a front, whichever
	wind      [trailSlots][2]float64
	held      [trailSlots]sensors.Instant
	stride    sensors.Instant // from link to link of the chain ...
	links     int             // ... and how many there are

	// What is believed before the steps that see the ring up to newest.
	newest sensors.Instant
	share  float64   // probability of an outflow ...
	front  float64   // ... and of a front
	odds   []float64 // by template: log of its share over an equal one
	most   float64   // of odds

	belief, moved []float64 // scratch ...
	factors       []float64 // ... and one more
	sum           []float64 // of the evidence of this step
}

// cell is where a centre stands on the grid.
type cell struct{ column, row int }

const (
	trailEvery = 30 * sensors.Second
	trailSlots = 40
	trailLinks = 7 // of the chain at most: ten minutes with blocks of 90 s
	// trailWorst bounds what one link can say for or against an outflow.
	trailWorst = 12
	// trailRadius is how many cells around the moved centre its share spreads to.
	trailRadius = 2
	// sizeChange is the share of an outflow's size and shape that a stride leaves
	// open.
	sizeChange = 0.4
)

func newTrail(templates []template, layout averages.Layout, p Prior) trail {
	n := len(templates)
	t := trail{prior: p, templates: n, each: 2 * len(p.OutflowRadii), log: make([]float32, trailSlots*n),
		odds: make([]float64, n), belief: make([]float64, n), moved: make([]float64, n), factors: make([]float64, n),
		sum: make([]float64, n)}
	reach := sensors.Instant(layout.Total()) * sensors.Second
	t.stride = (reach + trailEvery - 1) / trailEvery * trailEvery
	t.links = min(trailLinks, max(1, int((trailSlots-1)*trailEvery/t.stride)))
	t.newest = -1
	var least, most cell
	for j := 0; j < n; j += t.each {
		c := cell{int(math.Round(templates[j].x / p.OutflowSpacing)), int(math.Round(templates[j].y / p.OutflowSpacing))}
		if j == 0 {
			least, most = c, c
		}
		least = cell{min(least.column, c.column), min(least.row, c.row)}
		most = cell{max(most.column, c.column), max(most.row, c.row)}
		t.cells = append(t.cells, c)
	}
	t.columns = most.column - least.column + 1
	t.at = slices.Repeat([]int{-1}, t.columns*(most.row-least.row+1))
	for i := range t.cells {
		c := &t.cells[i]
		c.column, c.row = c.column-least.column, c.row-least.row
		t.at[c.row*t.columns+c.column] = i
	}
	t.share, t.front = p.OutflowShare, p.FrontShare
	return t
}

// recall brings share and odds to what is believed before step now.
func (t *trail) recall(now sensors.Instant) {
	newest := (now - t.stride) / trailEvery * trailEvery
	if newest == t.newest {
		return
	}
	t.newest = newest
	p := &t.prior
	seconds := float64(t.stride) / float64(sensors.Second)
	steady := p.OutflowShare / float64(t.templates)
	fades, passes := 1-math.Exp(-seconds/p.OutflowLife), 1-math.Exp(-seconds/p.FrontLife)
	for j := range t.belief {
		t.belief[j] = steady
	}
	front := p.FrontShare
	none := 1 - p.OutflowShare - front
	for link := t.links - 1; link >= 0; link-- {
		at := newest - sensors.Instant(link)*t.stride
		slot := int(at/trailEvery) % trailSlots
		var wind [2]float64
		if at >= 0 && t.held[slot] == at {
			wind = t.wind[slot]
			front = float64(front * math.Exp(p.TrailTemper*t.fronts[slot]))
			total := none + front
			for j, l := range t.log[slot*t.templates : (slot+1)*t.templates] {
				t.factors[j] = p.TrailTemper * float64(l)
			}
			exponentials(t.factors)
			for j, f := range t.factors {
				t.belief[j] *= f
				total += t.belief[j]
			}
			none, front = none/total, front/total
			for j := range t.belief {
				t.belief[j] /= total
			}
		}
		t.move(wind)
		fresh := none * fades * p.OutflowShare / float64(t.templates)
		front = float64((1-passes)*front) + float64(none*passes*p.FrontShare)
		none = 1 - front
		for j, m := range t.moved {
			t.belief[j] = float64((1-fades)*m) + fresh
			none -= t.belief[j]
		}
	}
	open := 1 - p.OutflowShare - p.FrontShare
	t.share, t.front = 0, p.FrontShare+float64(open*front)
	for j := range t.belief {
		t.belief[j] = steady + float64(open*t.belief[j])
		t.share += t.belief[j]
	}
	t.most = math.Inf(-1)
	for j, b := range t.belief {
		t.odds[j] = math.Log(b * float64(t.templates) / t.share)
		t.most = max(t.most, t.odds[j])
	}
}

// follow takes over what another estimator of the same outflows keeps.
func (t *trail) follow(before *trail) {
	if t.stride != before.stride {
		return
	}
	t.held, t.wind, t.fronts = before.held, before.wind, before.fronts
	copy(t.log, before.log)
}

// move spreads the shares of the centres around where the wind carries them, and
// some of each centre's over its sizes. What leaves the grid is gone.
func (t *trail) move(wind [2]float64) {
	clear(t.moved)
	seconds := float64(t.stride) / float64(sensors.Second)
	dx := t.prior.OutflowDrift * wind[0] * seconds / t.prior.OutflowSpacing
	dy := t.prior.OutflowDrift * wind[1] * seconds / t.prior.OutflowSpacing
	spread := t.prior.OutflowStray * seconds / t.prior.OutflowSpacing
	column, row := int(math.Round(dx)), int(math.Round(dy))
	const width = 2*trailRadius + 1
	var kernel [width * width]float64
	sum := 0.0
	for r := range width {
		for c := range width {
			x, y := float64(column+c-trailRadius)-dx, float64(row+r-trailRadius)-dy
			kernel[r*width+c] = math.Exp(-(float64(x*x) + float64(y*y)) / (2 * spread * spread))
			sum += kernel[r*width+c]
		}
	}
	for i := range kernel {
		kernel[i] /= sum
	}
	rows := len(t.at) / t.columns
	for i, from := range t.cells {
		own := t.belief[i*t.each : (i+1)*t.each]
		mean := 0.0
		for _, b := range own {
			mean += b / float64(t.each)
		}
		mixed := t.factors[:t.each]
		for k, b := range own {
			mixed[k] = float64((1-sizeChange)*b) + float64(sizeChange*mean)
		}
		for r := range width {
			y := from.row + row + r - trailRadius
			if y < 0 || y >= rows {
				continue
			}
			for c := range width {
				x := from.column + column + c - trailRadius
				if x < 0 || x >= t.columns {
					continue
				}
				to := t.at[y*t.columns+x]
				if to < 0 {
					continue
				}
				w := kernel[r*width+c]
				dst := t.moved[to*t.each : (to+1)*t.each]
				for k, m := range mixed {
					dst[k] += float64(w * m)
				}
			}
		}
	}
}

// wanted tells whether step now is kept.
func (t *trail) wanted(now sensors.Instant) bool { return now%trailEvery == 0 }

// remember keeps what step now said: sum holds the evidence of each template,
// front that of fronts and none that of neither, each without its prior.
func (t *trail) remember(now sensors.Instant, none, front float64, s *averages.Snapshot, live []int) {
	slot := int(now/trailEvery) % trailSlots
	t.held[slot] = now
	out := t.log[slot*t.templates : (slot+1)*t.templates]
	for j, v := range t.sum {
		out[j] = float32(odds(v, none))
	}
	t.fronts[slot] = odds(front, none)
	var east, north, n float64
	for _, m := range live {
		if b := &s.Mast(m).Blocks[blocks-1]; b.Present {
			east, north, n = east+b.East, north+b.North, n+1
		}
	}
	t.wind[slot] = [2]float64{}
	if n > 0 {
		t.wind[slot] = [2]float64{east / n, north / n}
	}
}

// odds is the logarithm of one evidence over another, no more than trailWorst
// either way. Either may have vanished, not both.
func odds(one, other float64) float64 {
	const least = 1e-300
	return min(max(math.Log(max(one, least)/max(other, least)), -trailWorst), trailWorst)
}

// keepTrail adds what state k says of each outflow of the bank, without what was
// believed of it before, to the sum that the trail keeps.
func (e *Estimator) keepTrail(en *entry, k int, top float64) {
	p := en.states[k].patterns[outflowClass]
	n, b := e.outflows.count(), e.b[outflowClass]
	scale := e.stateLog[k] - top - math.Log(float64(len(e.prior.Disturbed)))
	for j := range n {
		now := p.strengthNow(j, b[j], b[n+j], b[2*n+j])
		e.trail.sum[j] += float64(math.Exp(e.evidence[j]-e.trail.odds[j]+scale) * math.Erfc(-now*p.sharpness[j]))
	}
}
