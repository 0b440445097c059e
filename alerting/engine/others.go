package engine

import (
	"slices"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/front"
	"sockline/alerting/hazard"
	"sockline/alerting/vertical"
	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quantity"
)

// others is what the judging of everything besides the headwind needs: the
// columns of air, and the mast of each runway end.
type others struct {
	ids     []string
	columns []column
	shears  []vertical.Shear
	paths   []otherPath
}

// column is one column of air.
type column struct {
	levels []vertical.Level
	x, y   float64
}

// otherPath is what a path looks at besides its ground.
type otherPath struct {
	mast    int    // of its runway end; -1: none within reach
	columns []int  // within reach of it
	one     [1]int // for the lists of stations in use
	two     [2]int // the same
}

func newOthers(s Settings, g *ground) others {
	o := others{}
	for i := range s.Stations {
		o.ids = append(o.ids, s.Stations[i].ID)
	}
	for _, masts := range s.Airfield.Columns() {
		c := column{x: s.Airfield.Masts[masts[0]].X, y: s.Airfield.Masts[masts[0]].Y}
		for _, i := range masts {
			c.levels = append(c.levels, vertical.Level{Mast: i, ID: s.Stations[i].ID, Height: s.Airfield.Masts[i].Height})
		}
		o.columns = append(o.columns, c)
		o.shears = slices.Grow(o.shears, len(masts))
	}
	for i := range g.paths {
		p := g.paths[i].path
		x, y := p.At(0)
		q := otherPath{mast: s.Airfield.NearestMast(airfield.Point{X: x, Y: y}, s.Reach)}
		for c := range o.columns {
			at := airfield.Point{X: o.columns[c].x, Y: o.columns[c].y}
			if len(airfield.MastsBeside(p, []airfield.Point{at}, s.Reach)) > 0 {
				q.columns = append(q.columns, c)
			}
		}
		o.paths = append(o.paths, q)
	}
	return o
}

// defaultRoughness is the roughness length of open ground (WMO-No. 8), m, for a
// mast whose ground is not described.
const defaultRoughness = 0.03

// roughness of the ground that a wind comes over, m.
func roughness(s *sensors.Station, from float64) float64 {
	for _, r := range s.Roughness {
		width := quantity.NormalizeDegrees(r.To - r.From)
		if width == 0 || quantity.NormalizeDegrees(from-r.From) < width {
			return r.Length
		}
	}
	return defaultRoughness
}

// assessOthers fills what the assessments say besides loss and gain.
func (e *Engine) assessOthers(s *averages.Snapshot) {
	e.assessColumns(s)
	e.result.Vertical = e.others.shears
	t, l := s.At(), e.settings.Levels
	variation := e.variation(t)
	for i := range e.assessments {
		a, pg, q := &e.assessments[i], &e.ground.paths[i], &e.others.paths[i]
		for _, o := range []*hazard.Other{&a.Shift, &a.Vertical, &a.Cross, &a.Tail} {
			o.Detail.Variation = variation
			o.Seen = false
		}
		if len(a.Observed) > 0 {
			hazard.JudgeShift(&a.Shift, e.result.Fronts, func(f *front.Front) bool { return reaches(f, pg, t) }, l)
			a.Shift.From, a.Shift.To = a.Observed[0].From, a.Observed[len(a.Observed)-1].To
			a.Shift.Used = a.Loss.Used
		}
		e.frontCause(&a.Loss, pg)
		e.frontCause(&a.Gain, pg)
		near := func(v *vertical.Shear) bool { return slices.Contains(q.columns, v.Column) }
		if k := hazard.JudgeVertical(&a.Vertical, e.others.shears, near, l); k >= 0 {
			v := &e.others.shears[k]
			along, _ := pg.path.Along(v.X, v.Y)
			a.Vertical.From, a.Vertical.To = along, along
			q.two = [2]int{min(v.Lower, v.Upper), max(v.Lower, v.Upper)}
			a.Vertical.Used = q.two[:]
		}
		if q.mast >= 0 && s.Mast(q.mast).State == averages.Live && (l.Limits.Crosswind > 0 || l.Limits.Tailwind > 0) {
			if wind, _, ok := e.recorder.Mean(q.mast, vertical.Mean, t); ok {
				q.one[0] = q.mast
				hazard.JudgeEnd(&a.Cross, &a.Tail, wind, pg.path.BearingTrue(), e.others.ids[q.mast], l)
				a.Cross.Used, a.Tail.Used = q.one[:], q.one[:]
			}
		}
	}
}

// shiftStands is how long after its last mast on a path a front is told there.
// By then the means of ten minutes hold nothing of the wind before it.
const shiftStands = 10 * time.Minute

// reaches tells whether the change of a front has come to a path within the last
// ten minutes: a mast beside it has seen it, or it comes everywhere.
func reaches(f *front.Front, pg *pathGround, t sensors.Instant) bool {
	if !f.Moving {
		return true
	}
	for i := range f.Arrivals {
		a := &f.Arrivals[i]
		if a.Mast >= 0 && a.Arrived && t.Sub(a.At) <= shiftStands && slices.Contains(pg.beside, a.Mast) && slices.Contains(f.Hit, a.Mast) {
			return true
		}
	}
	return false
}

// frontCause names a front as the cause of a change whose cause the wind field
// leaves open, where its line lies across the ground of the change.
func (e *Engine) frontCause(c *hazard.Change, pg *pathGround) {
	if c.Cause != alerting.Unresolved || c.HoldLevel == alerting.NoLevel {
		return
	}
	x0, y0 := pg.path.At(c.From)
	x1, y1 := pg.path.At(c.To)
	for i := range e.result.Fronts {
		if f := &e.result.Fronts[i]; f.Kind == front.GustFront && f.Between(x0, y0, x1, y1) {
			c.Cause = alerting.GustFront
		}
	}
}

// assessColumns compares the levels of every column.
func (e *Engine) assessColumns(s *averages.Snapshot) {
	o := &e.others
	o.shears = o.shears[:0]
	if len(o.columns) == 0 {
		return
	}
	a := e.settings.Airfield
	night := vertical.Night(s.At().Time(), a.Latitude, a.Longitude)
	for c := range o.columns {
		col := &o.columns[c]
		for i := range col.levels {
			l := &col.levels[i]
			if l.Known = s.Mast(l.Mast).State == averages.Live; l.Known {
				l.Wind, l.Known = e.recorder.Measured(l.Mast, vertical.Mean, s.At())
				l.Roughness = roughness(&e.settings.Stations[l.Mast], l.Wind.From())
			}
		}
		first := len(o.shears)
		o.shears = vertical.Append(o.shears, c, col.levels, night)
		for i := first; i < len(o.shears); i++ {
			v := &o.shears[i]
			v.Place, v.X, v.Y = o.ids[v.Lower], col.x, col.y
		}
	}
}
