package engine

import (
	"math"

	"sockline/alerting/hazard"
	"sockline/alerting/shear"
	"sockline/sensors/averages"
)

// assess fills the assessment of every path from the snapshot.
func (e *Engine) assess(s *averages.Snapshot) {
	e.ground.update(s)
	posterior := e.field.Step(s)
	e.posterior = posterior
	e.lone.measured = e.lone.measured[:0]
	e.result.OutflowShare, e.result.Doubt = 0, nil
	e.result.Outflows = e.outflows.Step(s.At(), posterior)
	exercise := e.settings.Exercise
	var live []int
	if posterior != nil {
		e.result.OutflowShare, e.result.Doubt = posterior.OutflowShare, posterior.Doubt
		live = posterior.Live
		for _, i := range live {
			exercise = exercise || s.Mast(i).Exercise
		}
	}
	for i := range e.ground.paths {
		pg := &e.ground.paths[i]
		a := &e.assessments[i]
		a.Path = i
		a.Observed = pg.observed
		a.Complete = pg.complete
		a.Reason = pg.reason
		a.Missing = pg.missing
		a.Exercise = exercise
		a.Crosswind = crosswindRange(s, pg)
		if posterior == nil || !pg.usable {
			// Two points are the least that a change needs; without them the
			// path counts as not observed at all.
			a.Observed = nil
			a.Complete = false
			a.Loss, a.Gain = hazard.Change{}, hazard.Change{}
			continue
		}
		if pg.owner {
			pg.stretch.Measure(posterior)
		}
		// Every live mast carries the estimate: the field is one.
		a.Loss.Used, a.Gain.Used = live, live
		hazard.Judge(a, pg.stretch, pg.view, e.settings.Levels)
	}
	if posterior != nil {
		e.fewer(s.At(), s, posterior)
	}
}

// Stretch is the ground of a path as the last step measured it, and the first
// path that looks at the same ground; nil where too little of it is observed.
// It is valid until the next step.
func (e *Engine) Stretch(path int) (s *shear.Stretch, owner int) {
	pg := &e.ground.paths[path]
	for owner = range e.ground.paths {
		if e.ground.paths[owner].stretch == pg.stretch {
			break
		}
	}
	if e.assessments[path].Observed == nil {
		return nil, owner
	}
	return pg.stretch, owner
}

// crosswindRange is the greatest difference of crosswind between the live masts
// beside a path, m/s: of the mean over all their blocks.
func crosswindRange(s *averages.Snapshot, pg *pathGround) float64 {
	least, most := math.Inf(1), math.Inf(-1)
	east, north := pg.path.Direction()
	for _, i := range pg.beside {
		m := s.Mast(i)
		if m.State != averages.Live {
			continue
		}
		sum, n := 0.0, 0.0
		for b := range m.Blocks {
			if m.Blocks[b].Present {
				sum += float64(m.Blocks[b].East*north) - float64(m.Blocks[b].North*east)
				n++
			}
		}
		least, most = math.Min(least, sum/n), math.Max(most, sum/n)
	}
	return math.Max(most-least, 0)
}

// View is how a path looks at its stretch.
func (e *Engine) View(path int) hazard.View { return e.ground.paths[path].view }
