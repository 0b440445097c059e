package main

import (
	"sockline/alerting/engine"
	"sockline/alerting/wording"
)

// aheadSeconds is how far ahead the changes on a path are told.
const aheadSeconds = 60

// weather puts what lies over the airfield into a report: the headwind along
// every path and the outflows, as the page draws them.
func (r *reporter) weather(e *engine.Engine, res *engine.Result, out *report) {
	for i := range res.Assessments {
		a := &res.Assessments[i]
		r.points = e.Profile(i, r.points[:0])
		v := wording.ProfileView{
			Path: r.cfg.Airfield.Paths[i], Points: r.points, Crosswind: a.Crosswind, Exercise: r.exercise || a.Exercise,
		}
		if f, ok := e.Forecast(i, aheadSeconds); ok {
			v.Ahead = &f
		}
		out.Profiles = append(out.Profiles, v.JSON())
	}
	for i := range res.Outflows {
		v := wording.OutflowView{Outflow: res.Outflows[i], Airfield: r.cfg.Airfield, Exercise: r.exercise || res.Assessments[0].Exercise}
		out.Outflows = append(out.Outflows, v.JSON())
	}
}
