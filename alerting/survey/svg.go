package survey

import (
	"fmt"
	"html"
	"math"
	"strings"
)

// The colours of drawings: Okabe and Ito, "Color Universal Design", 2008 (from
// memory). Nothing is told by colour alone.
const (
	blue       = "#0072B2"
	sky        = "#56B4E9"
	vermillion = "#D55E00"
	orange     = "#E69F00"
	green      = "#009E73"
	purple     = "#CC79A7"
	ink        = "#1c1c1c"
	faint      = "#c9c9c9"
)

// drawing is one SVG picture. A plotting library would bring fonts of its own,
// as large as a third of the program, and could name nothing for a screen reader.
type drawing struct {
	b             strings.Builder
	width, height float64
}

// newDrawing begins a picture with a title that is read aloud.
func newDrawing(width, height float64, title string) *drawing {
	d := &drawing{width: width, height: height}
	fmt.Fprintf(&d.b, `<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 %.0f %.0f" role="img" font-family="sans-serif" font-size="13" fill="%s"><title>%s</title>`,
		width, height, ink, html.EscapeString(title))
	return d
}

func (d *drawing) end() string { return d.b.String() + "</svg>" }

func (d *drawing) line(x1, y1, x2, y2 float64, style string) {
	fmt.Fprintf(&d.b, `<line x1="%.1f" y1="%.1f" x2="%.1f" y2="%.1f" %s/>`, x1, y1, x2, y2, style)
}

func (d *drawing) rect(x, y, w, h float64, style, title string) {
	fmt.Fprintf(&d.b, `<rect x="%.1f" y="%.1f" width="%.1f" height="%.1f" %s>%s</rect>`, x, y, w, h, style, titled(title))
}

func (d *drawing) circle(x, y, r float64, style, title string) {
	fmt.Fprintf(&d.b, `<circle cx="%.1f" cy="%.1f" r="%.1f" %s>%s</circle>`, x, y, r, style, titled(title))
}

func titled(title string) string {
	if title == "" {
		return ""
	}
	return "<title>" + html.EscapeString(title) + "</title>"
}

// text at a place; anchor is start, middle or end.
func (d *drawing) text(x, y float64, anchor, text string) {
	fmt.Fprintf(&d.b, `<text x="%.1f" y="%.1f" text-anchor="%s">%s</text>`, x, y, anchor, html.EscapeString(text))
}

func stroke(colour string, width float64) string {
	return fmt.Sprintf(`stroke="%s" stroke-width="%g" fill="none"`, colour, width)
}

func fill(colour string) string { return fmt.Sprintf(`fill="%s"`, colour) }

// axes is a plot with two scales.
type axes struct {
	*drawing
	left, right, top, bottom float64
	x0, x1, y0, y1           float64
	root                     bool // x is drawn by its square root: small rates need room
}

// newAxes draws the frame of a plot.
func newAxes(title, xName, yName string, x0, x1, y0, y1 float64) *axes {
	a := &axes{drawing: newDrawing(720, 360, title), left: 62, right: 700, top: 18, bottom: 312, x0: x0, x1: x1, y0: y0, y1: y1}
	a.line(a.left, a.bottom, a.right, a.bottom, stroke(ink, 1))
	a.line(a.left, a.top, a.left, a.bottom, stroke(ink, 1))
	a.text((a.left+a.right)/2, 350, "middle", xName)
	fmt.Fprintf(&a.b, `<text transform="translate(16 %.0f) rotate(-90)" text-anchor="middle">%s</text>`, (a.top+a.bottom)/2, html.EscapeString(yName))
	return a
}

func (a *axes) x(v float64) float64 {
	low, high := a.x0, a.x1
	if a.root {
		v, low, high = math.Sqrt(max(v, 0)), math.Sqrt(low), math.Sqrt(high)
	}
	return a.left + (min(max(v, low), high)-low)/(high-low)*(a.right-a.left)
}

func (a *axes) y(v float64) float64 {
	return a.bottom - (min(max(v, a.y0), a.y1)-a.y0)/(a.y1-a.y0)*(a.bottom-a.top)
}

// ticks marks an axis.
func (a *axes) xTick(v float64, label string) {
	a.line(a.x(v), a.bottom, a.x(v), a.bottom+5, stroke(ink, 1))
	a.text(a.x(v), a.bottom+19, "middle", label)
}

func (a *axes) yTicks(step float64, format string) {
	for v := a.y0; v <= a.y1+step/1e6; v += step {
		a.line(a.left-5, a.y(v), a.right, a.y(v), stroke(faint, 0.6))
		a.text(a.left-8, a.y(v)+4, "end", fmt.Sprintf(format, v))
	}
}

// interval draws a value with the bar of its interval; shape tells the series.
func (a *axes) interval(x, v, low, high float64, colour, shape, title string) {
	a.line(x, a.y(low), x, a.y(high), stroke(colour, 2))
	a.line(x-4, a.y(low), x+4, a.y(low), stroke(colour, 2))
	a.line(x-4, a.y(high), x+4, a.y(high), stroke(colour, 2))
	if shape == "square" {
		a.rect(x-5, a.y(v)-5, 10, 10, fill("white")+fmt.Sprintf(` stroke="%s" stroke-width="2"`, colour), title)
		return
	}
	a.circle(x, a.y(v), 5.5, fill(colour), title)
}

// curve joins points.
func (a *axes) curve(xs, ys []float64, colour, dash string) {
	points := make([]string, len(xs))
	for i := range xs {
		points[i] = fmt.Sprintf("%.1f,%.1f", a.x(xs[i]), a.y(ys[i]))
	}
	fmt.Fprintf(&a.b, `<polyline points="%s" %s stroke-dasharray="%s"/>`, strings.Join(points, " "), stroke(colour, 2), dash)
}

// niceStep is a round step that cuts a span into about n parts.
func niceStep(span float64, n int) float64 {
	if span <= 0 {
		return 1
	}
	raw := span / float64(n)
	unit := math.Pow(10, math.Floor(math.Log10(raw)))
	for _, m := range []float64{1, 2, 5, 10} {
		if raw <= m*unit*1.0001 {
			return m * unit
		}
	}
	return 10 * unit
}
