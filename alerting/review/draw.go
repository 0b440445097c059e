package review

import (
	"fmt"
	"html/template"
	"math"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/sensors/quantity"
)

// The two ends of the scale of falls and rises: vermillion and blue of M. Okabe
// and K. Ito, "Color universal design", 2008, told apart by all who see.
const (
	fallColour = "#D55E00"
	riseColour = "#0072B2"
	ink        = "#1a1a1a"
	faint      = "#b0b0b0"
)

// planWidth is the width of a drawing, in its own units.
const planWidth = 720.0

// sheet is a drawing as SVG.
type sheet struct{ strings.Builder }

func newSheet(width, height float64, label string) *sheet {
	s := &sheet{}
	fmt.Fprintf(s, `<svg viewBox="0 0 %.0f %.0f" role="img" aria-label="%s" xmlns="http://www.w3.org/2000/svg">`, width, height, template.HTMLEscapeString(label))
	return s
}

func (s *sheet) line(x1, y1, x2, y2 float64, style string) {
	fmt.Fprintf(s, `<line x1="%.1f" y1="%.1f" x2="%.1f" y2="%.1f" %s/>`, x1, y1, x2, y2, style)
}

func (s *sheet) text(x, y float64, anchor, words string) {
	fmt.Fprintf(s, `<text x="%.1f" y="%.1f" text-anchor="%s">%s</text>`, x, y, anchor, template.HTMLEscapeString(words))
}

// curve draws through points; NaN breaks it.
func (s *sheet) curve(xs, ys []float64, style string) {
	var d strings.Builder
	pen := "M"
	for i := range xs {
		if math.IsNaN(ys[i]) {
			pen = "M"
			continue
		}
		fmt.Fprintf(&d, "%s%.1f %.1f", pen, xs[i], ys[i])
		pen = "L"
	}
	fmt.Fprintf(s, `<path d="%s" fill="none" %s/>`, d.String(), style)
}

func (s *sheet) end() template.HTML {
	s.WriteString("</svg>")
	return template.HTML(s.String())
}

// plan draws runways, the path, the masts with their wind and the place of the
// change, at the worst moment. North is up.
func (e *Event) plan() template.HTML {
	const width = planWidth
	left, right, low, high := math.Inf(1), math.Inf(-1), math.Inf(1), math.Inf(-1)
	see := func(x, y float64) {
		left, right, low, high = min(left, x), max(right, x), min(low, y), max(high, y)
	}
	for _, m := range e.field.Masts {
		see(m.X, m.Y)
	}
	for _, r := range e.field.Runways {
		see(r.Ends[0].Threshold.X, r.Ends[0].Threshold.Y)
		see(r.Ends[1].Threshold.X, r.Ends[1].Threshold.Y)
	}
	if e.path >= 0 {
		for _, at := range []float64{e.Worst.FromM, e.Worst.ToM} {
			see(e.field.Paths[e.path].At(at))
		}
	}
	margin := 0.12 * max(right-left, high-low, 1000)
	left, right, low, high = left-margin, right+margin, low-margin, high+margin
	scale := width / (right - left)
	height := max((high-low)*scale, 200)
	x := func(v float64) float64 { return (v - left) * scale }
	y := func(v float64) float64 { return (high - v) * scale }
	s := newSheet(width, height, "plan at the greatest change, north up")
	for _, r := range e.field.Runways {
		a, b := r.Ends[0].Threshold, r.Ends[1].Threshold
		s.line(x(a.X), y(a.Y), x(b.X), y(b.Y), `stroke="#56616b" stroke-width="9"`)
		for _, end := range r.Ends {
			sin, cos := math.Sincos(end.Bearing * math.Pi / 180)
			s.text(x(end.Threshold.X)-22*sin, y(end.Threshold.Y)+22*cos+4, "middle", end.Designator)
		}
	}
	e.planPath(s, x, y)
	for i, m := range e.field.Masts {
		s.mast(x(m.X), y(m.Y), e.mastWind(i, m.ID))
	}
	kilometre := 1000 * scale
	s.line(12, height-14, 12+kilometre, height-14, `stroke="`+ink+`" stroke-width="2"`)
	s.text(12+kilometre/2, height-19, "middle", "1 km")
	s.line(width-30, 40, width-30, 14, `stroke="`+ink+`" stroke-width="2"`)
	fmt.Fprintf(s, `<path d="M%.1f 10l-5 10h10z" fill="%s"/>`, width-30, ink)
	s.text(width-30, 54, "middle", "true north")
	return s.end()
}

// mastWind is the wind of a mast of the airfield, nil where there is none.
func (e *Event) mastWind(i int, id string) *MastWind {
	if i < len(e.Masts) && e.Masts[i].ID == id {
		return &e.Masts[i]
	}
	return nil
}

// planPath draws the path: dashed, whole where it was observed, and broad where
// the change lies.
func (e *Event) planPath(s *sheet, x, y func(float64) float64) {
	if e.path < 0 {
		return
	}
	p := e.field.Paths[e.path]
	stroke := func(from, to float64, style string) {
		ax, ay := p.At(from)
		bx, by := p.At(to)
		s.line(x(ax), y(ay), x(bx), y(by), style)
	}
	stroke(p.Extent().From, p.Extent().To, `stroke="`+ink+`" stroke-width="1" stroke-dasharray="5 5"`)
	for _, o := range e.observed {
		stroke(o.From, o.To, `stroke="`+ink+`" stroke-width="1.6"`)
	}
	colour, words := ink, e.Kind
	switch e.Kind {
	case string(alerting.HeadwindLoss):
		colour, words = fallColour, fmt.Sprintf("the headwind fell by about %.0f kt here", math.Abs(e.Worst.ChangeKt))
	case string(alerting.HeadwindGain):
		colour, words = riseColour, fmt.Sprintf("the headwind rose by about %.0f kt here", math.Abs(e.Worst.ChangeKt))
	}
	stroke(e.Worst.FromM, e.Worst.ToM, `stroke="`+colour+`" stroke-width="5" stroke-opacity="0.85"`)
	mx, my := p.At((e.Worst.FromM + e.Worst.ToM) / 2)
	s.text(min(max(x(mx), 110), 610), y(my)-14, "middle", words)
}

// mast draws a mast and the way its wind blows, 1 px for each knot and some.
func (s *sheet) mast(x, y float64, m *MastWind) {
	fmt.Fprintf(s, `<circle cx="%.1f" cy="%.1f" r="3.5" fill="#fff" stroke="%s" stroke-width="1.4"/>`, x, y, ink)
	if m == nil {
		return
	}
	if !m.HasWorst {
		s.text(x+7, y+14, "start", m.ID+": not observed")
		return
	}
	kt := m.Worst.Speed() / quantity.Knot
	if kt >= 0.5 {
		length := 8 + 1.2*kt
		ux, uy := m.Worst.East/m.Worst.Speed(), -m.Worst.North/m.Worst.Speed()
		tx, ty := x+length*ux, y+length*uy
		s.line(x, y, tx, ty, `stroke="`+ink+`" stroke-width="1.6"`)
		fmt.Fprintf(s, `<path d="M%.1f %.1fL%.1f %.1fL%.1f %.1fz" fill="%s"/>`, tx+5*ux, ty+5*uy, tx-3*uy, ty+3*ux, tx+3*uy, ty-3*ux, ink)
	}
	label := fmt.Sprintf("%s: %.0f kt from %03.0f", m.ID, kt, wholeDegrees(m.Worst.From()))
	if x > planWidth-150 {
		s.text(x-7, y+14, "end", label)
	} else {
		s.text(x+7, y+14, "start", label)
	}
}

// wholeDegrees is a direction as it is told: 1 to 360.
func wholeDegrees(deg float64) float64 {
	if d := math.Round(quantity.NormalizeDegrees(deg)); d != 0 {
		return d
	}
	return 360
}

// scaleOf is a rounded range for an axis.
func scaleOf(low, high, step float64) (float64, float64) {
	if low > high {
		return 0, step
	}
	low, high = math.Floor(low/step)*step, math.Ceil(high/step)*step
	if high-low < 2*step {
		high = low + 2*step
	}
	return low, high
}

// moments are the columns that are drawn as lines: a minute before the opening,
// the opening, the worst moment, and the end.
func (e *Event) moments() (columns []int, names []string) {
	begin := float64(e.from) / 1000
	pick := func(at time.Time, name string) {
		best := -1
		for i, t := range e.Profile.At {
			if d := math.Abs(begin + t - float64(at.Unix())); best < 0 || d < math.Abs(begin+e.Profile.At[best]-float64(at.Unix())) {
				best = i
			}
		}
		if best >= 0 {
			columns, names = append(columns, best), append(names, name)
		}
	}
	pick(e.Opened.Add(-2*time.Minute), "2 min before the opening")
	pick(e.Opened, "at the opening")
	pick(e.WorstAt, "at its greatest")
	if e.Closed != nil && e.Closed.Before(time.UnixMilli(int64(e.to))) {
		pick(*e.Closed, "at the closing")
	}
	return columns, names
}

// profiles draws the headwind along the path at some moments. The flight goes
// from left to right.
func (e *Event) profiles() template.HTML {
	p := &e.Profile
	if len(p.Before) < 2 || len(p.At) == 0 {
		return ""
	}
	const width, height, left, top, bottom = 720.0, 270.0, 50.0, 24.0, 40.0
	low, high := math.Inf(1), math.Inf(-1)
	columns, names := e.moments()
	for _, c := range columns {
		for _, v := range p.Headwind[c] {
			if !math.IsNaN(v) {
				low, high = min(low, v), max(high, v)
			}
		}
	}
	low, high = scaleOf(low, high, 5)
	first, last := p.Before[0], p.Before[len(p.Before)-1]
	x := func(before float64) float64 { return left + (first-before)/(first-last)*(width-left-170) }
	y := func(kt float64) float64 { return top + (high-kt)/(high-low)*(height-top-bottom) }
	s := newSheet(width, height, "headwind along the path")
	for v := low; v <= high; v += 5 {
		s.line(left, y(v), width-170, y(v), `stroke="`+faint+`" stroke-width="0.5"`)
		s.text(left-6, y(v)+3, "end", headwindAxis(v))
	}
	for b := math.Ceil(last/1000) * 1000; b <= first; b += 1000 {
		s.line(x(b), height-bottom, x(b), height-bottom+4, `stroke="`+ink+`"`)
		s.text(x(b), height-bottom+16, "middle", kilometres(b))
	}
	s.text((left+width-170)/2, height-6, "middle", "km before the threshold, in the direction of flight")
	s.text(left-40, top-12, "start", "headwind, kt")
	if last < 0 && first > 0 {
		s.line(x(0), top, x(0), height-bottom, `stroke="`+ink+`" stroke-dasharray="2 3"`)
		s.text(x(0), top-4, "middle", "threshold")
	}
	styles := []string{`stroke="#888" stroke-width="1.2"`, `stroke="` + ink + `" stroke-width="1.2" stroke-dasharray="6 3"`,
		`stroke="` + ink + `" stroke-width="2.6"`, `stroke="#888" stroke-width="1.2" stroke-dasharray="2 3"`}
	xs := make([]float64, len(p.Before))
	for i, b := range p.Before {
		xs[i] = x(b)
	}
	for i, c := range columns {
		ys := make([]float64, len(p.Before))
		for k, v := range p.Headwind[c] {
			ys[k] = y(v)
		}
		s.curve(xs, ys, styles[i%len(styles)])
		s.line(width-160, top+10+18*float64(i), width-135, top+10+18*float64(i), styles[i%len(styles)])
		s.text(width-130, top+14+18*float64(i), "start", names[i])
	}
	return s.end()
}

func headwindAxis(kt float64) string {
	if kt < 0 {
		return fmt.Sprintf("tail %.0f", -kt)
	}
	return fmt.Sprintf("%.0f", kt)
}

func kilometres(m float64) string {
	if m < 0 {
		return fmt.Sprintf("%.0f beyond", -m/1000)
	}
	return fmt.Sprintf("%.0f", m/1000)
}
