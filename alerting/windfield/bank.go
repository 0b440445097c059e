package windfield

import "math"

// bank is every outflow that is tried: centres on a square grid around the
// masts, each with a few radii and both radial shapes. Fixed for one set of
// masts.
type bank struct {
	templates []template
	atMast    []float64 // [template][mast][east, north]: unit wind at each mast
	atTarget  []float64 // [template][target]: unit headwind at each target
	masts     int
	targets   int
}

func newBank(masts []Mast, targets []Target, p Prior) *bank {
	b := &bank{masts: len(masts), targets: len(targets)}
	minX, minY, maxX, maxY := bounds(masts)
	m := p.OutflowMargin
	// The grid is anchored on whole multiples of the spacing, so that adding a
	// mast adds centres and moves none.
	first := func(v float64) float64 { return math.Ceil((v-m)/p.OutflowSpacing) * p.OutflowSpacing }
	for y := first(minY); y <= maxY+m; y += p.OutflowSpacing {
		for x := first(minX); x <= maxX+m; x += p.OutflowSpacing {
			if !near(masts, x, y, m) {
				continue
			}
			for _, radius := range p.OutflowRadii {
				for _, s := range []shape{broad, compact} {
					b.templates = append(b.templates, template{x: x, y: y, radius: radius, shape: s})
				}
			}
		}
	}
	b.atMast = make([]float64, len(b.templates)*2*len(masts))
	b.atTarget = make([]float64, len(b.templates)*len(targets))
	for j, t := range b.templates {
		for i, s := range masts {
			east, north := t.wind(s.X, s.Y)
			b.atMast[(j*len(masts)+i)*2] = east
			b.atMast[(j*len(masts)+i)*2+1] = north
		}
		for i, g := range targets {
			east, north := t.wind(g.X, g.Y)
			b.atTarget[j*len(targets)+i] = g.headwind(east, north)
		}
	}
	return b
}

func bounds(masts []Mast) (minX, minY, maxX, maxY float64) {
	minX, minY = math.Inf(1), math.Inf(1)
	maxX, maxY = math.Inf(-1), math.Inf(-1)
	for _, s := range masts {
		minX, maxX = math.Min(minX, s.X), math.Max(maxX, s.X)
		minY, maxY = math.Min(minY, s.Y), math.Max(maxY, s.Y)
	}
	return minX, minY, maxX, maxY
}

func near(masts []Mast, x, y, reach float64) bool {
	for _, s := range masts {
		if math.Hypot(x-s.X, y-s.Y) <= reach {
			return true
		}
	}
	return false
}
