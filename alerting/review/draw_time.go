package review

import (
	"fmt"
	"html/template"
	"math"
	"strings"
	"time"
)

// overTime draws the headwind along the path over time: distance upward, time to
// the right, darker where the headwind is larger. What was not observed stays
// white and is hatched.
func (e *Event) overTime() template.HTML {
	p := &e.Profile
	if len(p.Before) < 2 || len(p.At) < 2 {
		return ""
	}
	const width, height, left, top, bottom, right = 720.0, 250.0, 82.0, 16.0, 30.0, 90.0
	low, high := math.Inf(1), math.Inf(-1)
	for _, column := range p.Headwind {
		for _, v := range column {
			if !math.IsNaN(v) {
				low, high = min(low, v), max(high, v)
			}
		}
	}
	if low > high {
		return ""
	}
	low, high = scaleOf(low, high, 5)
	span := float64(e.to-e.from) / 1000
	x := func(t float64) float64 { return left + t/span*(width-left-right) }
	rows := float64(len(p.Before))
	cell := (height - top - bottom) / rows
	s := newSheet(width, height, "headwind along the path over time")
	s.WriteString(`<defs><pattern id="unseen" width="6" height="6" patternUnits="userSpaceOnUse" patternTransform="rotate(45)"><rect width="6" height="6" fill="#fff"/><rect width="1" height="6" fill="#999"/></pattern></defs>`)
	for i, t := range p.At {
		until := span
		if i+1 < len(p.At) {
			until = p.At[i+1]
		}
		for k, v := range p.Headwind[i] {
			fill := "url(#unseen)"
			if !math.IsNaN(v) {
				fill = shade((v - low) / (high - low))
			}
			fmt.Fprintf(s, `<rect x="%.1f" y="%.1f" width="%.1f" height="%.1f" fill="%s"/>`, x(t), top+cell*float64(k), x(until)-x(t)+0.3, cell+0.3, fill)
		}
	}
	e.timeAxis(s, x, span, top, height-bottom)
	first, last := p.Before[0], p.Before[len(p.Before)-1]
	for b := math.Ceil(last/1000) * 1000; b <= first; b += 1000 {
		s.text(left-6, top+(first-b)/(first-last)*(rows-1)*cell+cell/2+3, "end", strings.Replace(kilometres(b)+" km", " beyond km", " km beyond", 1))
	}
	for i := 0; i <= 4; i++ {
		v := low + (high-low)*float64(4-i)/4
		y := top + 10 + 30*float64(i)
		fmt.Fprintf(s, `<rect x="%.1f" y="%.1f" width="16" height="30" fill="%s" stroke="%s" stroke-width="0.3"/>`, width-right+14, y, shade(float64(4-i)/4), ink)
		s.text(width-right+35, y+18, "start", headwindAxis(v)+" kt")
	}
	return s.end()
}

// shade is a grey that is dark where the headwind is large.
func shade(share float64) string {
	g := int(245 - 205*min(max(share, 0), 1))
	return fmt.Sprintf("#%02x%02x%02x", g, g, min(g+6, 255))
}

// timeAxis writes times below a chart and marks opening, worst and closing.
func (e *Event) timeAxis(s *sheet, x func(float64) float64, span, top, foot float64) {
	begin := e.from.Time()
	step := 60.0
	for _, longer := range []float64{120, 300, 600, 1200, 1800} {
		if span/step > 12 {
			step = longer
		}
	}
	offset := step - math.Mod(float64(begin.Unix()), step)
	for t := math.Mod(offset, step); t <= span; t += step {
		s.line(x(t), foot, x(t), foot+4, `stroke="`+ink+`"`)
		s.text(x(t), foot+15, "middle", begin.Add(time.Duration(t)*time.Second).Format("15:04"))
	}
	mark := func(at time.Time, word string) {
		t := at.Sub(begin).Seconds()
		if t >= 0 && t <= span {
			s.line(x(t), top, x(t), foot, `stroke="`+ink+`" stroke-width="1" stroke-dasharray="3 2"`)
			s.text(x(t), top-4, "middle", word)
		}
	}
	mark(e.Opened, "opened")
	if e.WorstAt.Sub(e.Opened).Seconds() > span/12 {
		mark(e.WorstAt, "greatest")
	}
	if e.Closed != nil {
		mark(*e.Closed, "closed")
	}
}

// winds draws speed and direction of every mast over time.
func (e *Event) winds() []template.HTML {
	const width, height, left, top, mid, bottom = 720.0, 190.0, 56.0, 16.0, 118.0, 22.0
	high := 0.0
	for _, m := range e.Masts {
		for _, v := range m.Speed {
			high = max(high, v)
		}
	}
	_, high = scaleOf(0, high, 10)
	span := float64(e.to-e.from) / 1000
	var out []template.HTML
	for _, m := range e.Masts {
		s := newSheet(width, height, "wind of mast "+m.ID)
		x := func(t float64) float64 { return left + t/span*(width-left-10) }
		y := func(kt float64) float64 { return top + (high-kt)/high*(mid-top-16) }
		d := func(deg float64) float64 { return mid + deg/360*(height-bottom-mid) }
		for v := 0.0; v <= high; v += 10 {
			s.line(left, y(v), width-10, y(v), `stroke="`+faint+`" stroke-width="0.4"`)
			s.text(left-6, y(v)+3, "end", fmt.Sprintf("%.0f kt", v))
		}
		for _, deg := range []float64{0, 180, 360} {
			s.line(left, d(deg), width-10, d(deg), `stroke="`+faint+`" stroke-width="0.4"`)
			s.text(left-6, d(deg)+3, "end", fmt.Sprintf("from %03.0f", deg))
		}
		xs, ys := brokenAt(m.At, m.Speed, 3*windSpan.Seconds())
		for i := range xs {
			xs[i], ys[i] = x(xs[i]), y(ys[i])
		}
		s.curve(xs, ys, `stroke="`+ink+`" stroke-width="1.3"`)
		for i, t := range m.At {
			fmt.Fprintf(s, `<circle cx="%.1f" cy="%.1f" r="1.3" fill="%s"/>`, x(t), d(m.From[i]), ink)
		}
		e.timeAxis(s, x, span, top, height-bottom)
		s.text(left+4, top+10, "start", m.ID)
		out = append(out, s.end())
	}
	return out
}

// brokenAt puts a NaN where two values lie farther apart than gap seconds:
// nothing was observed in between.
func brokenAt(at, values []float64, gap float64) (xs, ys []float64) {
	for i, t := range at {
		if i > 0 && t-at[i-1] > gap {
			xs, ys = append(xs, t), append(ys, math.NaN())
		}
		xs, ys = append(xs, t), append(ys, values[i])
	}
	return xs, ys
}
