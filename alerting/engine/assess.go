package engine

import (
	"sockline/alerting/hazard"
	"sockline/alerting/shear"
	"sockline/sensors/averages"
)

// assess fills the assessment of every path from the snapshot.
func (e *Engine) assess(s *averages.Snapshot) {
	e.ground.update(s)
	posterior := e.field.Step(s)
	e.result.OutflowShare, e.result.Doubt = 0, nil
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
