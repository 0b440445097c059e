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

// fewer looks at what one mast fewer would change, for every path that has a
// level. Its cost is bounded: one mast every few steps, in turn, and one more when
// beyond-margin is met while a mast stands alone.
func (e *Engine) fewer(t sensors.Instant, s *averages.Snapshot, p *windfield.Posterior) {
	raised, beyond := false, false
	for i := range e.assessments {
		a := &e.assessments[i]
		if a.Loss.Level > alerting.NoLevel || a.Gain.Level > alerting.NoLevel {
			raised = true
		}
		beyond = beyond || a.Loss.Level == alerting.BeyondMargin
	}
	if !raised || len(p.Live) < 2 {
		return
	}
	if m := mostAlone(p); beyond && p.Alone[m] >= standsAlone {
		e.withoutMast(s, m, func(a *hazard.Assessment, without *shear.Stretch) {
			l := e.settings.Levels
			if a.Loss.Level == alerting.BeyondMargin && without.Loss.AtLeast(l.Noticeable) < l.Confidence {
				a.Loss.Level = alerting.Large
				a.Loss.HoldLevel = min(a.Loss.HoldLevel, alerting.Large)
			}
		})
	}
	if t%turnEvery != 0 {
		return
	}
	turn := p.Live[int(t/turnEvery)%len(p.Live)]
	e.withoutMast(s, turn, func(a *hazard.Assessment, without *shear.Stretch) {
		a.Loss.Fewer = hazard.Fewer{Known: true, Mast: turn, Median: without.Loss.Quantile(0.5)}
		a.Gain.Fewer = hazard.Fewer{Known: true, Mast: turn, Median: without.Gain.Quantile(0.5)}
	})
}

// turnEvery is how often another mast is left out, on the UTC clock: to do so
// costs as much as dozens of plain steps.
const turnEvery = 5 * sensors.Second

// standsAlone are the odds, from an even-handed prior, from which beyond-margin
// must not rest on a mast alone: its neighbours speak against it or at least do
// not bear it out.
const standsAlone = 0.25

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

// withoutMast measures every path that has a level without one mast.
func (e *Engine) withoutMast(s *averages.Snapshot, mast int, tell func(a *hazard.Assessment, without *shear.Stretch)) {
	p := e.field.Without(s, mast)
	if p == nil {
		return
	}
	var done []*shear.Stretch
	for i := range e.assessments {
		a, pg := &e.assessments[i], &e.ground.paths[i]
		if a.Loss.Level == alerting.NoLevel && a.Gain.Level == alerting.NoLevel {
			continue
		}
		w := e.ahead.stretch(pg.stretch)
		if !slices.Contains(done, w) { // paths share their ground
			w.Measure(p)
			done = append(done, w)
		}
		tell(a, w)
	}
}
