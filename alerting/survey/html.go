package survey

import (
	_ "embed" // for the template
	"encoding/json"
	"fmt"
	"html/template"
	"io"
	"strings"

	"sockline/sensors/quantity"
)

//go:embed report.html
var reportHTML string

// WriteJSON writes the report as JSON.
func (r *Report) WriteJSON(w io.Writer) error {
	e := json.NewEncoder(w)
	e.SetIndent("", "  ")
	e.SetEscapeHTML(false)
	if err := e.Encode(r); err != nil {
		return fmt.Errorf("write the report: %w", err)
	}
	return nil
}

// WriteHTML writes the report as one page that needs nothing else: pictures are
// in it, it runs no script and fetches nothing.
func (r *Report) WriteHTML(w io.Writer) error {
	t, err := template.New("report").Funcs(r.functions()).Parse(reportHTML)
	if err != nil {
		return fmt.Errorf("read the template of the report: %w", err)
	}
	if err := t.Execute(w, r); err != nil {
		return fmt.Errorf("write the report: %w", err)
	}
	return nil
}

// functions are what the template may call.
func (r *Report) functions() template.FuncMap {
	return template.FuncMap{
		"blindMap":  func(x Result, kt float64) template.HTML { return blindMap(&x.Layout, x.Findings, kt) },
		"siteMap":   func(x Result) template.HTML { return siteMap(&x.Layout, x.Design) },
		"plainMap":  func(x Result) template.HTML { return plainMap(&x.Layout) },
		"detection": detectionChart, "reliability": reliabilityChart, "falsely": falseChart, "choices": choiceChart, "spread": spreadChart, "worth": worthChart,
		"along": func(f *Findings) template.HTML {
			return placeChart(f.Along, "where the outflow stood, m before the threshold (negative: beyond it)")
		},
		"summary": func(x Result) []string { return x.summary() },
		"lines":   func(f *Findings) string { return strings.Join(f.ConfigurationLines(r.Accepted), "\n") },
		"list":    func(names []string) string { return strings.Join(names, ", ") },
		"share":   func(s Share) string { return s.words() },
		"fault":   func(r FaultRate) string { return r.what() },
		"rate":    func(r Rate) string { return r.words() },
		"delay":   func(d Delay) string { return d.words() },
		"class":   func(c Coverage) string { return ClassShare{From: c.From, To: c.To}.class() },
		"percent": func(x float64) string { return fmt.Sprintf("%.1f", 100*x) },
		"knots":   func(ms float64) string { return fmt.Sprintf("%.0f", quantity.Knots(ms)) },
		"strong":  func(f *Findings) string { return fmt.Sprintf("%.0f", f.Large*4/3) },
		"plus":    func(i int) int { return i + 1 },
	}
}

// summary is what a meeting should hear first, in sentences.
func (x Result) summary() []string {
	var out []string
	if f := x.Findings; f != nil {
		out = append(out, f.summary()...)
	}
	d := x.Design
	if len(d.Masts) > 0 {
		worst := d.Masts[0]
		for _, m := range d.Masts {
			if m.Bits > worst.Bits {
				worst = m
			}
		}
		s := fmt.Sprintf("The mast that matters most is %s: without it the headwind along the paths is known to %.1f kt where it was %.1f kt", worst.ID, worst.Mean, d.Mean)
		if len(worst.Blinds) > 0 {
			s += ", and " + strings.Join(worst.Blinds, ", ") + " would read \"not observed\""
		}
		out = append(out, s+".")
	}
	if len(d.Sites) > 0 {
		s := d.Sites[0]
		name := fmt.Sprintf("latitude %.6f, longitude %.6f", s.Latitude, s.Longitude)
		if s.Name != "" {
			name = s.Name + " (" + name + ")"
		}
		out = append(out, fmt.Sprintf("The best place for one more mast is %s: it would bring the %.1f kt down to %.1f kt.", name, d.Mean, s.Mean))
	}
	var blind []string
	for _, p := range d.Paths {
		if !p.Complete {
			blind = append(blind, p.Name)
		}
	}
	if len(blind) > 0 {
		out = append(out, "Even with all masts live, nothing but \"not observed\" can be said of "+strings.Join(blind, ", ")+": some of the ground that matters has no mast near it.")
	}
	return out
}

// summary of what was found.
func (f *Findings) summary() []string {
	var out []string
	if s := f.Strong; s.Cases > 0 {
		out = append(out, fmt.Sprintf("Of losses of headwind of %.0f kt or more on observed ground, %.0f in 100 raise level 2 (%d of %d; 95 %% interval %.0f to %.0f).",
			f.Large*4/3, 100*s.Share, s.Hits, s.Cases, 100*s.Low, 100*s.High))
	}
	if s := f.StrongWhole; s.Cases > 0 {
		out = append(out, fmt.Sprintf("Of those anywhere on the paths, observed or not, it is %.0f in 100: of the rest some come down where no mast stands near enough, and there the path says so.", 100*s.Share))
	}
	if f.Delay.Cases > f.Delay.Missed {
		out = append(out, fmt.Sprintf("Half of the alerts are there within %.0f s of the loss passing %.0f kt, nine in ten within %.0f s.", f.Delay.Median, f.Large, f.Delay.P90))
	}
	var events int
	var hours float64
	for _, w := range f.False {
		events, hours = events+w.Both.Events, hours+w.Both.Hours
	}
	if hours > 0 {
		out = append(out, fmt.Sprintf("In windy weather up to 30 kt, with all instruments sound, level 2 opens falsely %.2f times in 100 hours of one path (%d times in %.0f hours).", 100*float64(events)/hours, events, hours))
	}
	if events, hours := f.Windy.Events-events, f.Windy.Hours-hours; hours > 0.01 {
		out = append(out, fmt.Sprintf("With one instrument broken it is %.2f (%d in %.0f).", 100*float64(events)/hours, events, hours))
	}
	if g := f.Ground; g != nil {
		for _, c := range g.Counts {
			if c.Strength == groundStrong && c.Radius == groundSmall {
				out = append(out, fmt.Sprintf("A small outflow of %.0f kt from side to side goes unseen on %d of %d places where it makes a large change on observed ground.",
					c.Strength, c.Unseen, c.Unseen+c.Seen))
			}
		}
	}
	return out
}
