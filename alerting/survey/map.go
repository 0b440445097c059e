package survey

import (
	"fmt"
	"html/template"
	"math"
)

// chartMap is the airfield seen from above, north up.
type chartMap struct {
	*drawing
	scale, x0, y1 float64
}

const mapWidth = 720.0

// newMap makes room for everything in a layout and around it.
func newMap(l *Layout, title string, margin float64) *chartMap {
	low, high := [2]float64{math.Inf(1), math.Inf(1)}, [2]float64{math.Inf(-1), math.Inf(-1)}
	take := func(p [2]float64) {
		for i, v := range p {
			low[i], high[i] = min(low[i], v), max(high[i], v)
		}
	}
	for _, p := range l.Paths {
		take(p.From)
		take(p.To)
	}
	for _, m := range l.Masts {
		take([2]float64{m.East, m.Nor})
	}
	m := &chartMap{x0: low[0] - margin, y1: high[1] + margin}
	m.scale = (mapWidth - 20) / (high[0] - low[0] + 2*margin)
	m.drawing = newDrawing(mapWidth, (high[1]-low[1]+2*margin)*m.scale+56, title)
	return m
}

func (m *chartMap) at(p [2]float64) (x, y float64) {
	return 10 + (p[0]-m.x0)*m.scale, 10 + (m.y1-p[1])*m.scale
}

// network draws runways, paths and masts.
func (m *chartMap) network(l *Layout) {
	for _, p := range l.Paths {
		x1, y1 := m.at(p.From)
		x2, y2 := m.at(p.To)
		m.line(x1, y1, x2, y2, stroke("#777777", 1.2)+` stroke-dasharray="3 5"`)
		for _, o := range p.Observed {
			x1, y1 := m.at(o[0])
			x2, y2 := m.at(o[1])
			m.line(x1, y1, x2, y2, stroke(blue, 2.4))
		}
	}
	for i, r := range l.Runways {
		x1, y1 := m.at(r[0])
		x2, y2 := m.at(r[1])
		m.line(x1, y1, x2, y2, stroke(ink, 7))
		for k, p := range [][2]float64{{x1, y1}, {x2, y2}} {
			m.designator(l, p, [2]float64{p[0] - (x1+x2)/2, p[1] - (y1+y2)/2}, l.Ends[i][k])
		}
	}
	for _, mast := range l.Masts {
		x, y := m.at([2]float64{mast.East, mast.Nor})
		fmt.Fprintf(&m.b, `<path d="M%.1f %.1fl7 13h-14z" fill="white" stroke="%s" stroke-width="2"><title>mast %s</title></path>`, x, y-8, ink, template.HTMLEscapeString(mast.ID))
		m.label(x+10, y+4, "start", mast.ID)
	}
	m.rule()
}

// designator writes the name of a runway end beside it, on the side where no
// mast is near. out points away from the runway.
func (m *chartMap) designator(l *Layout, p, out [2]float64, name string) {
	n := math.Hypot(out[0], out[1])
	var best [2]float64
	room := -1.0
	for _, side := range []float64{-1, 1} {
		q := [2]float64{p[0] + 10*out[0]/n - side*20*out[1]/n, p[1] + 10*out[1]/n + side*20*out[0]/n}
		nearest := math.Inf(1)
		for _, mast := range l.Masts {
			x, y := m.at([2]float64{mast.East, mast.Nor})
			nearest = min(nearest, math.Hypot(x+15-q[0], y-q[1])) // its name stands to the right of it
		}
		if nearest > room {
			best, room = q, nearest
		}
	}
	m.label(best[0], best[1]+4, "middle", name)
}

// label is a text that can be read over lines.
func (m *chartMap) label(x, y float64, anchor, text string) {
	fmt.Fprintf(&m.b, `<text x="%.1f" y="%.1f" text-anchor="%s" paint-order="stroke" stroke="white" stroke-width="3.5">%s</text>`,
		x, y, anchor, template.HTMLEscapeString(text))
}

// rule draws a kilometre and where north is.
func (m *chartMap) rule() {
	y := m.height - 16
	m.line(14, y, 14+1000*m.scale, y, stroke(ink, 2))
	m.line(14, y-5, 14, y+5, stroke(ink, 2))
	m.line(14+1000*m.scale, y-5, 14+1000*m.scale, y+5, stroke(ink, 2))
	m.text(22+1000*m.scale, y+4, "start", "1 km; north is up")
}

// blindMap shows what becomes of an outflow of one strength on each place:
// the worse of the radii that were tried.
func blindMap(l *Layout, f *Findings, strength float64) template.HTML {
	m := newMap(l, fmt.Sprintf("Where an outflow of %.0f kt goes unseen", strength), 1700)
	type spot struct{ x, y float64 }
	worst := map[spot]Seen{}
	var order []spot
	rank := map[Seen]int{Harmless: 0, SeenWell: 1, Outside: 2, Unseen: 3}
	for i := range f.Ground.Places {
		p := &f.Ground.Places[i]
		if p.Strength != strength {
			continue
		}
		s := spot{p.X, p.Y}
		was, known := worst[s]
		if !known {
			order = append(order, s)
		}
		if now := p.Seen(f.Large); !known || rank[now] > rank[was] {
			worst[s] = now
		}
	}
	size := f.Ground.Step * m.scale * 0.42
	for _, s := range order {
		x, y := m.at([2]float64{s.x, s.y})
		title := fmt.Sprintf("%.0f m east, %.0f m north: %s", s.x, s.y, worst[s])
		switch worst[s] {
		case Unseen:
			m.unseen(x, y, size, title)
		case Outside:
			m.rect(x-size, y-size, 2*size, 2*size, `fill="#ececec" stroke="#8a8a8a" stroke-width="1"`, title)
		case SeenWell:
			m.circle(x, y, 3, fill(sky), title)
		case Harmless:
			m.circle(x, y, 1.2, fill("#9a9a9a"), title)
		}
	}
	m.network(l)
	return picture(m.end())
}

// unseen is a filled square with a cross: it stands out without its colour.
func (m *chartMap) unseen(x, y, size float64, title string) {
	m.rect(x-size, y-size, 2*size, 2*size, `fill="#f7c9a9" stroke="`+vermillion+`" stroke-width="1.5"`, title)
	m.line(x-size, y-size, x+size, y+size, stroke(vermillion, 1.5))
	m.line(x-size, y+size, x+size, y-size, stroke(vermillion, 1.5))
}

// siteMap shows what each tried place would gain, and the chosen ones.
func siteMap(l *Layout, d *Design) template.HTML {
	m := newMap(l, "Where the next masts should stand", 1200)
	most := 0.0
	for _, t := range d.Tried {
		most = max(most, t.Bits)
	}
	for _, t := range d.Tried {
		x, y := m.at([2]float64{t.X, t.Y})
		m.circle(x, y, 1+4*t.Bits/max(most, 1e-9), fill(sky), fmt.Sprintf("%.2f bits", t.Bits))
	}
	m.network(l)
	for i, s := range d.Sites {
		x, y := m.at([2]float64{s.X, s.Y})
		m.circle(x, y, 11, fill("white")+` stroke="`+vermillion+`" stroke-width="2.5"`, s.Name)
		m.text(x, y+4.5, "middle", fmt.Sprint(i+1))
	}
	return picture(m.end())
}

// plainMap is the network alone.
func plainMap(l *Layout) template.HTML {
	m := newMap(l, "The masts, the runways and what is observed of the paths", 700)
	m.network(l)
	return picture(m.end())
}
