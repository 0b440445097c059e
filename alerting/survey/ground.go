package survey

import (
	"math"

	"sockline/alerting/airfield"
	"sockline/alerting/shear"
	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
)

// How the truth is looked at: M as it is defined, at mast height, over the
// very points that the engine looks at.
const (
	truthHeight = 10.0 // m
	pairPoints  = int(4000 / shear.Spacing)
)

// ground is what one path looks at and no path before it does: a landing one
// way and a take-off the other way cover the same ground and count once.
type ground struct {
	path     int // index into the airfield's paths
	p        airfield.Path
	x, y     float64 // the first point, m
	dx, dy   float64 // from one to the next
	before   []float64
	observed []bool // with all masts live
	seen     int    // how many are

	wind []quantity.Vector
	head []float64
}

// grounds lists them for a network whose masts are all live.
func grounds(n *Network) []*ground {
	a := n.Settings.Airfield
	masts, _ := n.standing()
	var out []*ground
	for r := range a.Runways {
		lead, _ := runwaySpan(a, r)
		east, north := lead.Direction()
		var taken []airfield.Interval
		for _, i := range landingsFirst(a, r) {
			p := a.Paths[i]
			span := inFrame(lead, p)
			if covered(taken, span) {
				continue
			}
			taken = append(taken, span)
			g := &ground{path: i, p: p, dx: east * shear.Spacing, dy: north * shear.Spacing}
			first := math.Floor((span.From + 1e-6) / shear.Spacing)
			g.x, g.y = lead.At(first * shear.Spacing)
			observed := airfield.Observed(p, masts, n.Settings.Reach, airfield.Beyond)
			for k := first; k*shear.Spacing >= span.To-1e-6; k-- {
				along, _ := p.Along(lead.At(k * shear.Spacing))
				in := false
				for _, iv := range observed {
					in = in || iv.Contains(along)
				}
				g.before, g.observed = append(g.before, along), append(g.observed, in)
				if in {
					g.seen++
				}
			}
			g.wind, g.head = make([]quantity.Vector, len(g.before)), make([]float64, len(g.before))
			out = append(out, g)
		}
	}
	return out
}

// landingsFirst are the paths of a runway: ground that a landing and a take-off
// share goes by the name of the landing.
func landingsFirst(a *airfield.Airfield, runway int) (out []int) {
	ends := &a.Runways[runway].Ends
	for _, operation := range []string{airfield.Landing, airfield.TakeOff} {
		for i, p := range a.Paths {
			if p.Operation() == operation && (p.Runway() == ends[0].Designator || p.Runway() == ends[1].Designator) {
				out = append(out, i)
			}
		}
	}
	return out
}

func covered(taken []airfield.Interval, span airfield.Interval) bool {
	for _, t := range taken {
		if math.Abs(t.From-span.From) < 1 && math.Abs(t.To-span.To) < 1 {
			return true
		}
	}
	return false
}

// change is the true M of a ground, m/s: on what is observed, and on all of it.
type change struct{ loss, gain, lossAll, gainAll float64 }

// look takes M of the true wind, t seconds after the start.
func (g *ground) look(w *synthetic.Weather, t float64) (c change) {
	w.WindAlong(g.wind, g.x, g.y, g.dx, g.dy, truthHeight, t)
	return g.measure()
}

// lookAt takes M of an outflow alone.
func (g *ground) lookAt(o *synthetic.Outflow, t float64) (c change) {
	for i := range g.wind {
		u, v := o.Wind(g.x+float64(i)*g.dx, g.y+float64(i)*g.dy, truthHeight, t)
		g.wind[i] = quantity.Vector{East: u, North: v}
	}
	return g.measure()
}

// measure takes M of the winds along the ground. The order of the points is
// that of a flight along the lead path; reversed, every fall is still a fall.
func (g *ground) measure() (c change) {
	for i, v := range g.wind {
		g.head[i] = -(v.East*g.dx + v.North*g.dy) / shear.Spacing
	}
	for i, a := range g.head {
		for j := i + 1; j < len(g.head) && j <= i+pairPoints; j++ {
			d := a - g.head[j]
			if d > c.lossAll {
				c.lossAll = d
			}
			if -d > c.gainAll {
				c.gainAll = -d
			}
			if g.observed[i] && g.observed[j] {
				if d > c.loss {
					c.loss = d
				}
				if -d > c.gain {
					c.gain = -d
				}
			}
		}
	}
	return c
}
