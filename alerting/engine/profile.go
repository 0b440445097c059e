package engine

import (
	"slices"

	"sockline/alerting/outflow"
	"sockline/alerting/shear"
	"sockline/alerting/windfield"
)

// Profile appends the headwind along a path as of the last step to dst, in the
// order of flight; nothing when the step saw nothing. No step works it out: it
// is for whoever asks between two.
func (e *Engine) Profile(path int, dst []shear.ProfilePoint) []shear.ProfilePoint {
	pg := &e.ground.paths[path]
	if e.posterior == nil {
		return dst
	}
	first := len(dst)
	nt := len(e.posterior.Mean)
	var draws [windfield.Draws]float64
	for i, t := range pg.stretch.Points {
		for d := range draws {
			draws[d] = e.posterior.Draws[d*nt+t]
		}
		slices.Sort(draws[:])
		p := shear.ProfilePoint{
			At: pg.view.Before[i], Observed: pg.stretch.Observed[i],
			Low: shear.Quantile(draws[:], 0.05), Headwind: shear.Quantile(draws[:], 0.5), High: shear.Quantile(draws[:], 0.95),
		}
		if pg.view.Reversed {
			p.Low, p.Headwind, p.High = -p.High, -p.Headwind, -p.Low
		}
		dst = append(dst, p)
	}
	if pg.view.Reversed {
		slices.Reverse(dst[first:])
	}
	return dst
}

// forecaster is the scratch of what might be: a minute ahead, or with one mast
// fewer. Made when first asked for.
type forecaster struct {
	posterior windfield.Posterior
	spares    spares
}

// Forecast is what a path's greatest changes will be after so many seconds if
// the outflow of the last step moves and grows as it has done: in each draw it
// is taken away where it is and put back where its motion and growth, drawn
// with their spreads, bring it. The air around it is held as it is. False when no
// outflow with a known motion is under way, or the path is not observed.
func (e *Engine) Forecast(path int, seconds float64) (shear.Forecast, bool) {
	pg := &e.ground.paths[path]
	if e.posterior == nil || !pg.usable || len(e.result.Outflows) == 0 || !e.result.Outflows[0].Motion.Known {
		return shear.Forecast{}, false
	}
	f := &e.ahead
	nt := len(e.posterior.Mean)
	if f.posterior.Mean == nil {
		f.posterior.Mean = make([]float64, nt)
		f.posterior.Draws = make([]float64, windfield.Draws*nt)
	}
	s := f.spares.of(pg.stretch)
	f.posterior.Kinds = e.posterior.Kinds
	copy(f.posterior.Draws, e.posterior.Draws)
	clear(f.posterior.Mean)
	for d := range windfield.Draws {
		row := f.posterior.Draws[d*nt : (d+1)*nt]
		if o := &e.posterior.Over[d]; o.Strength > 0 {
			then := ahead(o, e.result.Outflows, d, seconds)
			for _, t := range pg.stretch.Points {
				g := e.ground.targets[t]
				row[t] += g.Headwind(then.Wind(g.X, g.Y)) - g.Headwind(o.Wind(g.X, g.Y))
			}
		}
		for t, v := range row {
			f.posterior.Mean[t] += float64(v / windfield.Draws)
		}
	}
	s.Measure(&f.posterior)
	out := shear.Forecast{Seconds: seconds}
	for i, p := range [...]float64{0.05, 0.5, 0.95} {
		out.Loss[i], out.Gain[i] = s.Loss.Quantile(p), s.Gain.Quantile(p)
	}
	return out, true
}

// ahead is the outflow of draw d after so many seconds: the nearest of those
// that are told lends it its motion and growth.
func ahead(o *windfield.Outflow, told []outflow.Outflow, d int, seconds float64) windfield.Outflow {
	near := &told[0]
	for i := range told {
		if told[i].Gap(o.X, o.Y) < near.Gap(o.X, o.Y) {
			near = &told[i]
		}
	}
	z := windfield.Scores(d)
	dx := float64(seconds * (near.Motion.East + float64(near.Motion.Spread*z[0])))
	dy := float64(seconds * (near.Motion.North + float64(near.Motion.Spread*z[1])))
	strength := o.Strength + float64(seconds*(near.Growth+float64(near.GrowthSpread*z[2])))
	return o.Moved(dx, dy, max(strength, 0))
}
