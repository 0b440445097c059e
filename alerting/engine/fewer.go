package engine

import (
	"slices"

	"sockline/alerting"
	"sockline/alerting/hazard"
	"sockline/alerting/shear"
	"sockline/alerting/windfield"
	"sockline/sensors"
	"sockline/sensors/averages"
)

// spares are stretches over the same ground as those of the paths, to measure
// another field on. Made when first asked for.
type spares map[*shear.Stretch]*shear.Stretch

// of is the spare of a stretch, with the same ground observed.
func (s *spares) of(stretch *shear.Stretch) *shear.Stretch {
	if *s == nil {
		*s = make(spares)
	}
	spare, ok := (*s)[stretch]
	if !ok {
		spare = shear.NewStretch(stretch.Points)
		(*s)[stretch] = spare
	}
	copy(spare.Observed, stretch.Observed)
	return spare
}

// lone is what the last step found without the mast that stands alone.
type lone struct {
	spares   spares
	measured []*shear.Stretch // of the paths, whose spares were measured
}

// Without is the ground of a path as the last step measured it without the mast
// that stands alone; nil where none does, or no levels could make a difference.
// It is valid until the next step.
func (e *Engine) Without(path int) *shear.Stretch {
	s := e.ground.paths[path].stretch
	if !slices.Contains(e.lone.measured, s) {
		return nil
	}
	return e.lone.spares[s]
}

// fewer looks at what one mast fewer would change, for every path that has a
// level or may have one by other levels. Its cost is bounded: one mast every few
// steps, in turn, and one more when much of a loss is found while a mast stands
// alone.
func (e *Engine) fewer(t sensors.Instant, s *averages.Snapshot, p *windfield.Posterior) {
	if len(p.Live) < 2 {
		return
	}
	if m := mostAlone(p); p.Alone[m] >= hazard.StandsAlone {
		e.restrain(s, m)
	}
	if t%turnEvery != 0 {
		return
	}
	raised := false
	for i := range e.assessments {
		raised = raised || e.hasLevel(i)
	}
	if raised {
		e.leaveOut(s, p.Live[int(t/turnEvery)%len(p.Live)])
	}
}

func (e *Engine) hasLevel(path int) bool {
	a := &e.assessments[path]
	return a.Loss.Level > alerting.NoLevel || a.Gain.Level > alerting.NoLevel
}

// turnEvery is how often another mast is left out, on the UTC clock: to do so
// costs as much as dozens of plain steps.
const turnEvery = 5 * sensors.Second

// mostAlone is the mast that its neighbours contradict most.
func mostAlone(p *windfield.Posterior) int {
	worst := 0
	for i, odds := range p.Alone {
		if odds > p.Alone[worst] {
			worst = i
		}
	}
	return worst
}

// restrain holds beyond-margin to the rule that it does not rest on one mast.
func (e *Engine) restrain(s *averages.Snapshot, mast int) {
	var p *windfield.Posterior
	for i := range e.assessments {
		a, pg := &e.assessments[i], &e.ground.paths[i]
		if len(a.Observed) == 0 || !hazard.MayRest(a, pg.stretch) {
			continue
		}
		if p == nil {
			if p = e.field.Without(s, mast); p == nil {
				return
			}
		}
		without := e.Without(i)
		if without == nil {
			without = e.lone.spares.of(pg.stretch)
			without.Measure(p)
			e.lone.measured = append(e.lone.measured, pg.stretch)
		}
		e.settings.Levels.Restrain(a, without.Loss.AtLeast(e.settings.Levels.Noticeable))
	}
}

// leaveOut measures every path that has a level without one mast.
func (e *Engine) leaveOut(s *averages.Snapshot, mast int) {
	p := e.field.Without(s, mast)
	if p == nil {
		return
	}
	var done []*shear.Stretch
	for i := range e.assessments {
		if !e.hasLevel(i) {
			continue
		}
		a, pg := &e.assessments[i], &e.ground.paths[i]
		w := e.ahead.spares.of(pg.stretch)
		if !slices.Contains(done, w) { // paths share their ground
			w.Measure(p)
			done = append(done, w)
		}
		a.Loss.Fewer = hazard.Fewer{Known: true, Mast: mast, Median: w.Loss.Quantile(0.5)}
		a.Gain.Fewer = hazard.Fewer{Known: true, Mast: mast, Median: w.Gain.Quantile(0.5)}
	}
}
