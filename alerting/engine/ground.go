package engine

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"sockline/alerting/airfield"
	"sockline/alerting/hazard"
	"sockline/alerting/outflow"
	"sockline/alerting/shear"
	"sockline/alerting/windfield"
	"sockline/sensors/averages"
)

// ground is the geometry of what can be observed: points along every runway's
// centreline, the stretches that the paths look at, and, for the masts that
// are live, which of it is observed. Paths of one runway that cover the same
// ground in opposite directions share a stretch.
type ground struct {
	airfield *airfield.Airfield
	reach    float64
	masts    []airfield.Point
	aloft    []bool // masts that take no part: see airfield.Aloft
	targets  []windfield.Target
	paths    []pathGround
	live     []bool
	known    bool // live has been set once
}

// pathGround is what one path looks at.
type pathGround struct {
	path     airfield.Path
	stretch  *shear.Stretch
	owner    bool // the first path of its stretch: the one that measures it
	view     hazard.View
	beside   []int // masts within reach of the path
	observed []airfield.Interval
	complete bool
	reason   string
	usable   bool // at least two points are observed
	missing  []int
}

// line is the points of one runway: at multiples of the spacing before the
// threshold of its first end, over everything its paths cover.
type line struct {
	first  int // target index
	before []float64
}

func newGround(a *airfield.Airfield, reach float64) *ground {
	g := &ground{airfield: a, reach: reach, masts: a.MastPoints(), aloft: a.Aloft(), live: make([]bool, len(a.Masts))}
	for i := range a.Runways {
		g.addRunway(&a.Runways[i])
	}
	return g
}

// lines are the grounds of the paths, in the airfield's order.
func (g *ground) lines() []outflow.Path {
	out := make([]outflow.Path, len(g.airfield.Paths))
	for i, p := range g.airfield.Paths {
		extent := p.Extent()
		out[i].FromX, out[i].FromY = p.At(extent.From)
		out[i].ToX, out[i].ToY = p.At(extent.To)
	}
	return out
}

func (g *ground) addRunway(r *airfield.Runway) {
	var paths []airfield.Path
	for _, p := range g.airfield.Paths {
		if p.Runway() == r.Ends[0].Designator || p.Runway() == r.Ends[1].Designator {
			paths = append(paths, p)
		}
	}
	lead := paths[0] // of the first end
	far, near := math.Inf(-1), math.Inf(1)
	spans := make([]airfield.Interval, len(paths))
	for i, p := range paths {
		spans[i] = inFrame(lead, p)
		far, near = math.Max(far, spans[i].From), math.Min(near, spans[i].To)
	}
	l := line{first: len(g.targets)}
	east, north := lead.Direction()
	for k := int(math.Floor(far / shear.Spacing)); float64(k)*shear.Spacing >= near; k-- {
		s := float64(k) * shear.Spacing
		x, y := lead.At(s)
		l.before = append(l.before, s)
		g.targets = append(g.targets, windfield.Target{X: x, Y: y, East: east, North: north})
	}
	var stretches []covered
	for i, p := range paths {
		stretches = g.addPath(p, lead, l, spans[i], stretches)
	}
}

// inFrame is the extent of a path in the distances of another path of the same
// runway.
func inFrame(lead, p airfield.Path) airfield.Interval {
	e := p.Extent()
	a, _ := lead.Along(p.At(e.From))
	b, _ := lead.Along(p.At(e.To))
	return airfield.Interval{From: math.Max(a, b), To: math.Min(a, b)}
}

// covered is the ground of a stretch. Paths share a stretch only if they cover
// the same ground to the metre: what is observed of it is then the same too.
type covered struct {
	span    airfield.Interval
	stretch *shear.Stretch
}

// addPath gives a path its stretch, shared where another path covers the same
// points, and its view of it.
func (g *ground) addPath(p, lead airfield.Path, l line, span airfield.Interval, stretches []covered) []covered {
	var points []int
	pg := pathGround{path: p, beside: airfield.MastsBeside(p, g.masts, g.reach)}
	pg.beside = slices.DeleteFunc(pg.beside, func(m int) bool { return g.aloft[m] })
	pg.view.Reversed = p.Runway() != lead.Runway()
	if p.Operation() == airfield.Landing {
		pg.view.Crossing = p.GlideHeight(0)
		pg.view.Glide = (p.GlideHeight(1000) - pg.view.Crossing) / 1000
	}
	for i, s := range l.before {
		if s <= span.From+1e-6 && s >= span.To-1e-6 {
			points = append(points, l.first+i)
			along, _ := p.Along(lead.At(s))
			pg.view.Before = append(pg.view.Before, along)
		}
	}
	for _, s := range stretches {
		if math.Abs(s.span.From-span.From) < 1 && math.Abs(s.span.To-span.To) < 1 {
			pg.stretch = s.stretch
		}
	}
	if pg.stretch == nil {
		pg.stretch = shear.NewStretch(points)
		pg.owner = true
		stretches = append(stretches, covered{span, pg.stretch})
	}
	g.paths = append(g.paths, pg)
	return stretches
}

// update follows the set of live masts. Observed ground depends on geometry
// and live masts only, never on the weather.
func (g *ground) update(s *averages.Snapshot) {
	same := g.known
	for i := range g.live {
		live := s.Mast(i).State == averages.Live && !g.aloft[i]
		same = same && g.live[i] == live
		g.live[i] = live
	}
	if same {
		return
	}
	g.known = true
	var standing []airfield.Point
	for i, live := range g.live {
		if live {
			standing = append(standing, g.masts[i])
		}
	}
	for i := range g.paths {
		g.paths[i].update(standing, g.live, g.reach)
	}
}

func (pg *pathGround) update(standing []airfield.Point, live []bool, reach float64) {
	pg.observed = airfield.Observed(pg.path, standing, reach, airfield.Beyond)
	var gaps []airfield.Interval
	pg.complete, gaps = airfield.Complete(pg.observed, pg.path.Needed())
	pg.missing = pg.missing[:0]
	for _, m := range pg.beside {
		if !live[m] {
			pg.missing = append(pg.missing, m)
		}
	}
	pg.reason = reasonFor(pg, gaps)
	seen := 0
	for i, s := range pg.view.Before {
		in := false
		for _, iv := range pg.observed {
			in = in || iv.Contains(s)
		}
		if in {
			seen++
		}
		pg.stretch.Observed[i] = in
	}
	pg.usable = seen >= 2
}

// reasonFor says in words why the needed ground is not all observed.
func reasonFor(pg *pathGround, gaps []airfield.Interval) string {
	switch {
	case pg.complete:
		return ""
	case len(pg.beside) == 0:
		return "no mast stands beside this path"
	case len(pg.missing) == len(pg.beside):
		return "no mast beside this path reports"
	case len(pg.missing) == 0:
		return "no mast stands near " + gapWords(gaps)
	}
	return "masts beside this path do not report, and nothing else sees " + gapWords(gaps)
}

func gapWords(gaps []airfield.Interval) string {
	words := make([]string, len(gaps))
	for i, gap := range gaps {
		words[i] = fmt.Sprintf("%.0f to %.0f m", gap.From, gap.To)
	}
	return strings.Join(words, " and ") + " before the threshold"
}
