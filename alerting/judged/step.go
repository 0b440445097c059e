package judged

import (
	"fmt"
	"math"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/hazard"
	"sockline/sensors"
)

// Step is one kept step as it is read back.
type Step struct {
	At      sensors.Instant
	Context *Context

	block  *block
	row    *row
	steeps []steep
}

// Distribution is what is kept of M on one side of a path, in m/s: its 5, 20,
// 50, 80 and 95 % points to a tenth of a knot.
type Distribution struct {
	Low, Under, Median, Over, High float64
}

// Distribution of the loss (or the gain) of a path; false where nothing was
// measured, or where even the 95 % point lay below 5 kt.
func (s *Step) Distribution(path int, gain bool) (d Distribution, ok bool) {
	_, of := s.Context.stretches()
	i := s.Context.sides() * of[path]
	if gain {
		i++
	}
	m := &s.row.sides[i]
	if m.state != full {
		return d, false
	}
	p := func(i int) float64 { return float64(m.points[i]) * tenth }
	return Distribution{p(0), p(1), p(2), p(3), p(4)}, true
}

// Judge gives kept steps their levels anew.
type Judge struct {
	context *Context
	of      []int
	levels  hazard.Levels
	open    [4]cut // by level
	hold    [4]cut
	exact   bool

	block    *block // whose grounds these are
	observed [][]airfield.Interval
}

// cut is where a level lies among the thresholds: at one of them, or so far on
// the way to the next.
type cut struct {
	at   int
	part float64
	none bool
}

// NewJudge prepares to judge the steps of a context by these levels. It fails
// for a level that lies outside of what is kept.
func NewJudge(c *Context, l hazard.Levels) (*Judge, error) {
	j := &Judge{context: c, levels: l, exact: true}
	_, j.of = c.stretches()
	for level, change := range [...]float64{alerting.Noticeable: l.Noticeable, alerting.Large: l.Large, alerting.BeyondMargin: l.Beyond()} {
		if change <= 0 { // no level, or one that is switched off
			j.open[level], j.hold[level] = cut{none: true}, cut{none: true}
			continue
		}
		var err error
		if j.open[level], err = j.cut(change); err != nil {
			return nil, err
		}
		if j.hold[level], err = j.cut(change - l.Hysteresis); err != nil {
			return nil, err
		}
	}
	return j, nil
}

// Exact reports whether every level is one at which the probability was kept,
// so that the levels come out as the analysis itself would have given them.
// Else they lie between two whole knots, and the probability is interpolated.
func (j *Judge) Exact() bool { return j.exact }

func (j *Judge) cut(change float64) (cut, error) {
	t := j.context.Thresholds
	for i, v := range t {
		if math.Abs(v-change) < sameLevel {
			return cut{at: i}, nil
		}
		if v > change && i == 0 {
			break
		}
		if v > change {
			j.exact = false
			return cut{at: i - 1, part: (change - t[i-1]) / (v - t[i-1])}, nil
		}
	}
	return cut{}, fmt.Errorf("a level of %.2f m/s lies outside of what is kept of each step (5 to 60 kt)", change)
}

// share of the draws at a cut; what is less than half counts as nothing.
func (c cut) share(counts []uint8) float64 {
	if c.none || c.at >= len(counts) {
		return 0
	}
	n := float64(counts[c.at])
	if c.part > 0 {
		n += float64(c.part * (float64(counts[c.at+1]) - n))
	}
	if n < leastCount {
		return 0
	}
	return n / draws
}

// Assess gives the assessments of a step, one for each path of its context.
// dst is used again where it is long enough. Only what decides about alerts is
// filled in: slopes and the F-factor are not kept.
func (j *Judge) Assess(s *Step, dst []hazard.Assessment) []hazard.Assessment {
	if j.block != s.block {
		j.block = s.block
		j.observed = j.observed[:0]
		for _, g := range s.block.grounds {
			for _, p := range g.paths {
				var all []airfield.Interval
				for _, o := range p.observed {
					all = append(all, interval(o))
				}
				j.observed = append(j.observed, all)
			}
		}
	}
	paths := len(j.context.Paths)
	if len(dst) != paths {
		dst = make([]hazard.Assessment, paths)
	}
	g := &s.block.grounds[s.row.ground]
	for i := range dst {
		a := &dst[i]
		*a = hazard.Assessment{Path: i, Observed: j.observed[s.row.ground*paths+i],
			Complete: g.paths[i].complete, Missing: g.paths[i].missing, Exercise: s.row.exercise}
		if len(a.Observed) == 0 {
			continue
		}
		sides := s.row.sides[j.context.sides()*j.of[i]:]
		j.side(&a.Loss, &sides[0], s.row.places[2*i], g.used)
		j.side(&a.Gain, &sides[1], s.row.places[2*i+1], g.used)
		j.steepen(a, s, i)
		j.levels.Settle(a)
		if j.context.Without && sides[2].state != notSeen {
			j.levels.Restrain(a, j.open[alerting.Noticeable].share(sides[2].counts))
		}
	}
	return dst
}

func (j *Judge) side(c *hazard.Change, m *side, at place, used []int) {
	c.From, c.To, c.AtEdge, c.Used = float64(at.from)/10, float64(at.to)/10, at.edge, used
	if m.state != full {
		return
	}
	c.Low, c.Median, c.High = float64(m.points[0])*tenth, float64(m.points[2])*tenth, float64(m.points[4])*tenth
	for level := alerting.Noticeable; level <= alerting.BeyondMargin; level++ {
		c.Probability[level] = j.open[level].share(m.counts)
		c.CloseProbability[level] = j.hold[level].share(m.counts)
	}
}

// steepen takes the F-factor into account, where it mattered.
func (j *Judge) steepen(a *hazard.Assessment, s *Step, path int) {
	a.Gain.Probability[alerting.BeyondMargin], a.Gain.CloseProbability[alerting.BeyondMargin] = 0, 0
	for i := range s.steeps {
		if t := &s.steeps[i]; t.path == path {
			a.Loss.Probability[alerting.BeyondMargin] = j.open[alerting.BeyondMargin].share(t.open)
			a.Loss.CloseProbability[alerting.BeyondMargin] = j.hold[alerting.BeyondMargin].share(t.close)
		}
	}
}

// Complete tells whether all the ground that a path needs was observed.
func (s *Step) Complete(path int) bool { return s.block.grounds[s.row.ground].paths[path].complete }
