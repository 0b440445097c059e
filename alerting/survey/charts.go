package survey

import (
	"fmt"
	"html/template"
	"math"

	"sockline/sensors/quantity"
)

// picture marks a drawing as safe: every text in it was escaped on its way in.
func picture(s string) template.HTML { return template.HTML(s) }

// detectionChart is what is found against the true change.
func detectionChart(f *Findings) template.HTML {
	a := newAxes("Share of losses that are found, by their true strength", "true loss of headwind, kt", "share found", 0, float64(len(f.Detection)), 0, 1)
	a.yTicks(0.2, "%.1f")
	for i, c := range f.Detection {
		a.xTick(float64(i)+0.5, c.class())
		if c.Cases > 0 {
			a.interval(a.x(float64(i)+0.4), c.Share.Share, c.Low, c.High, blue, "circle", "on observed ground: "+c.words())
		}
		if w := f.Whole[i]; w.Cases > 0 {
			a.interval(a.x(float64(i)+0.65), w.Share.Share, w.Low, w.High, vermillion, "square", "on the whole path: "+w.words())
		}
	}
	return picture(a.end())
}

// reliabilityChart is how often a loss reached the level, by the probability that
// was told of it: on the diagonal what is told can be taken at its word.
func reliabilityChart(f *Findings) template.HTML {
	a := newAxes(fmt.Sprintf("How often there was a loss of %.0f kt or more, by the probability told of it", f.Large), "told probability, in 100", "share of the steps", 0, 100, 0, 1)
	a.yTicks(0.2, "%.1f")
	for k := 0.0; k <= 100; k += 20 {
		a.xTick(k, fmt.Sprintf("%.0f", k))
	}
	a.line(a.x(0), a.y(0), a.x(100), a.y(1), stroke(ink, 1))
	for _, c := range f.Sure {
		if c.Cases > 0 {
			a.interval(a.x((c.From+c.To)/2), c.Share.Share, c.Low, c.High, blue, "circle", c.class()+" in 100: "+c.words())
		}
	}
	return picture(a.end())
}

// placeChart is what is found against where the outflow stood.
func placeChart(classes []ClassShare, name string) template.HTML {
	a := newAxes("Share of strong losses that are found, by place", name, "share found", 0, float64(len(classes)), 0, 1)
	a.yTicks(0.2, "%.1f")
	for i, c := range classes {
		a.xTick(float64(i), fmt.Sprintf("%.0f", c.From))
		if c.Cases > 0 {
			a.interval(a.x(float64(i)+0.5), c.Share.Share, c.Low, c.High, blue, "circle", c.class()+" m: "+c.words())
		}
	}
	if n := len(classes); n > 0 {
		a.xTick(float64(n), fmt.Sprintf("%.0f", classes[n-1].To))
	}
	return picture(a.end())
}

// falseChart is the false openings against the mean wind.
func falseChart(f *Findings) template.HTML {
	most := 0.1
	for _, w := range f.False {
		most = max(most, w.Both.High)
	}
	step := niceStep(most, 5)
	n := len(f.False) / 2
	a := newAxes("False openings of level 2 or more, by mean wind", "mean wind, kt", "in 100 path-hours", 0, float64(max(n, 1)), 0, math.Ceil(most/step)*step)
	a.yTicks(step, "%g")
	for i, w := range f.False {
		at, colour, shape := float64(i%n)+0.4, blue, "circle"
		if w.Eddies {
			at, colour, shape = float64(i%n)+0.65, vermillion, "square"
		} else {
			a.xTick(float64(i%n)+0.5, fmt.Sprintf("%.0f to %.0f", quantity.Knots(w.From), quantity.Knots(w.To)))
		}
		if w.Both.Hours > 0 {
			a.interval(a.x(at), w.Both.Per100, w.Both.Low, w.Both.High, colour, shape, w.Both.words())
		}
	}
	return picture(a.end())
}

// choiceChart is what each choice of level and confidence finds against what it
// opens falsely: a curve for each confidence, a point for each level.
func choiceChart(f *Findings) template.HTML {
	most := 1.0
	for _, c := range f.Sweep {
		if c.Level >= 12 && c.Confidence >= 0.6 {
			most = max(most, c.Per100)
		}
	}
	step := niceStep(most, 5)
	a := newAxes("What each choice finds against what it opens falsely", "false openings in 100 path-hours (square root scale)", "share found", 0, math.Ceil(most/step)*step, 0, 1)
	a.root = true
	a.yTicks(0.2, "%.1f")
	for v := 0.0; v <= a.x1; v += step {
		a.xTick(v, fmt.Sprintf("%g", v))
	}
	a.xTick(step/10, fmt.Sprintf("%g", step/10))
	styles := []struct{ colour, dash string }{{orange, "2 4"}, {green, "6 3"}, {sky, "10 4"}, {blue, "none"}, {purple, "8 3 2 3"}, {vermillion, "2 2"}}
	for k, confidence := range confidences() {
		var xs, ys []float64
		for _, c := range f.Sweep {
			if c.Confidence == confidence && c.Detection.Cases > 0 && c.False.Cases > 0 {
				xs, ys = append(xs, c.Per100), append(ys, c.Detection.Share)
				a.circle(a.x(c.Per100), a.y(c.Detection.Share), 3, fill(styles[k].colour),
					fmt.Sprintf("%d kt at %.2f: %s; %.2f false openings", c.Level, c.Confidence, c.Detection.words(), c.Per100))
				if c.InForce {
					a.circle(a.x(c.Per100), a.y(c.Detection.Share), 8, stroke(ink, 2), "in force")
					a.text(a.x(c.Per100)+12, a.y(c.Detection.Share)+14, "start", fmt.Sprintf("in force: %d kt, %.2f", c.Level, c.Confidence))
				}
			}
		}
		a.curve(xs, ys, styles[k].colour, styles[k].dash)
		y := a.bottom - 10 - 18*float64(confidenceCount-1-k)
		a.curveKey(a.right-150, y, styles[k].colour, styles[k].dash, fmt.Sprintf("confidence %.2f", confidence))
	}
	return picture(a.end())
}

func (a *axes) curveKey(x, y float64, colour, dash, text string) {
	a.line(x, y-4, x+34, y-4, stroke(colour, 2)+fmt.Sprintf(` stroke-dasharray="%s"`, dash))
	a.text(x+42, y, "start", text)
}

// spreadChart is how well the headwind is known along the paths.
func spreadChart(d *Design) template.HTML {
	far, near, most := 0.0, 0.0, d.Prior
	for _, p := range d.Paths {
		_, high := extent(p.Spread)
		most = max(most, high)
		for _, b := range p.Before {
			far, near = max(far, b), min(near, b)
		}
	}
	top := math.Ceil(most/2) * 2
	a := newAxes("Standard deviation of the headwind along the paths", "m before the threshold of the path (right: beyond it)", "kt", 0, far-near, 0, top)
	a.yTicks(2, "%.0f")
	for v := math.Ceil(near/1000) * 1000; v <= far; v += 1000 {
		a.xTick(far-v, fmt.Sprintf("%.0f", v))
	}
	dashes := []string{"none", "8 4", "2 3", "10 3 2 3"}
	colours := []string{blue, vermillion, green, purple}
	for k, p := range d.Paths {
		xs := make([]float64, len(p.Before))
		for i, b := range p.Before {
			xs[i] = far - b
		}
		a.curve(xs, p.Spread, colours[k%len(colours)], dashes[k%len(dashes)])
		a.curveKey(a.left+12, a.bottom-10-18*float64(k), colours[k%len(colours)], dashes[k%len(dashes)], p.Name)
	}
	return picture(a.end())
}

// worthChart is what each mast is worth.
func worthChart(d *Design) template.HTML {
	height := 34 + 26*float64(len(d.Masts))
	p := newDrawing(720, height, "Information that is lost when one mast fails")
	most := 0.0
	for _, m := range d.Masts {
		most = max(most, m.Bits)
	}
	for i, m := range d.Masts {
		y := 12 + 26*float64(i)
		w := 430 * m.Bits / max(most, 1e-9)
		p.text(130, y+14, "end", m.ID)
		p.rect(138, y, w, 19, fill(blue), "")
		p.text(146+w, y+14, "start", fmt.Sprintf("%.2f bits", m.Bits))
	}
	return picture(p.end())
}
