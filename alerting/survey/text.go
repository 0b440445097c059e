package survey

import (
	"fmt"
	"io"
	"strings"

	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
)

// WriteText prints the report for a terminal.
func (r *Report) WriteText(w io.Writer) error {
	var b strings.Builder
	b.WriteString("EXERCISE: everything here comes from drawn weather.\n")
	for i := range r.Results {
		x := &r.Results[i]
		fmt.Fprintf(&b, "\n%s, %d masts\n%s\n", x.Layout.Name, len(x.Layout.Masts), strings.Repeat("=", len(x.Layout.Name)+10))
		x.Design.text(&b)
		if x.Findings != nil {
			x.Findings.text(&b, r.Accepted)
		}
	}
	if r.Comparison != nil {
		r.Comparison.text(&b, r.Results[0].Layout.Name, r.Results[1].Layout.Name)
	}
	b.WriteString("\nTo be read with it\n")
	for _, c := range r.Caveats {
		wrapTo(&b, "  - ", c)
	}
	b.WriteString("\n")
	wrapTo(&b, "", r.Notice)
	_, err := io.WriteString(w, b.String())
	return err
}

// wrapTo breaks a sentence into lines of at most 100 characters.
func wrapTo(b *strings.Builder, mark, text string) {
	indent, line := strings.Repeat(" ", len(mark)), mark
	for _, word := range strings.Fields(text) {
		if len(line)+len(word) > 99 && strings.TrimSpace(line) != "" {
			b.WriteString(strings.TrimRight(line, " ") + "\n")
			line = indent
		}
		line += word + " "
	}
	b.WriteString(strings.TrimRight(line, " ") + "\n")
}

func (d *Design) text(b *strings.Builder) {
	fmt.Fprintf(b, "\nKnown of the headwind in disturbed air, without any episode: to %.1f kt (standard deviation) on\naverage along the paths up to 3 km from the runway; where no mast tells anything of it, to %.1f kt or worse.\n", d.Mean, d.Prior)
	for _, p := range d.Paths {
		observed := make([]string, len(p.Observed))
		for i, o := range p.Observed {
			observed[i] = fmt.Sprintf("%.0f to %.0f m", o[0], o[1])
		}
		if len(observed) == 0 {
			observed = []string{"nothing"}
		}
		low, high := extent(p.Spread)
		fmt.Fprintf(b, "  %-14s observed %s before the threshold; from %.1f to %.1f kt\n", p.Name, strings.Join(observed, ", "), low, high)
	}
	b.WriteString("\nWhat is lost when one mast fails\n  mast            information   then known to   ground no longer observed\n")
	for _, m := range d.Masts {
		fmt.Fprintf(b, "  %-14s  %6.2f bits   %5.1f kt        %5.0f m%s\n", m.ID, m.Bits, m.Mean, m.Observed, pathsLost(m.Blinds))
	}
	if len(d.Sites) > 0 {
		b.WriteString("\nWhere the next masts should stand, the best first\n  site                  latitude    longitude   gains       then known to   more ground\n")
	}
	for i, s := range d.Sites {
		name := s.Name
		if name == "" {
			name = fmt.Sprintf("site %d", i+1)
		}
		fmt.Fprintf(b, "  %-20s %10.6f  %11.6f  %5.2f bits   %5.1f kt        %5.0f m%s\n", name, s.Latitude, s.Longitude, s.Bits, s.Mean, s.Observed, pathsWon(s.Completes))
	}
}

func extent(values []float64) (low, high float64) {
	for i, v := range values {
		if i == 0 || v < low {
			low = v
		}
		high = max(high, v)
	}
	return low, high
}

func pathsLost(names []string) string {
	if len(names) == 0 {
		return ""
	}
	return "; not observed then: " + strings.Join(names, ", ")
}

func pathsWon(names []string) string {
	if len(names) == 0 {
		return ""
	}
	return "; observed then: " + strings.Join(names, ", ")
}

// words of a share, as in "0.93 (0.88 to 0.96), 110 of 118".
func (s Share) words() string {
	if s.Cases == 0 {
		return "none met"
	}
	return fmt.Sprintf("%.2f (%.2f to %.2f), %d of %d", s.Share, s.Low, s.High, s.Hits, s.Cases)
}

// words of a rate.
func (r Rate) words() string {
	if r.Hours == 0 {
		return "none met"
	}
	return fmt.Sprintf("%.2f (%.2f to %.2f), %d in %.0f", r.Per100, r.Low, r.High, r.Events, r.Hours)
}

// what is broken, in words.
func (r FaultRate) what() string {
	switch r.Fault {
	case synthetic.FaultDead:
		return "silent"
	case synthetic.FaultStuck:
		return "stuck"
	case synthetic.FaultTurned:
		return "turned by 20 to 90 degrees"
	case synthetic.FaultFactor:
		return "reads 0.3 to 0.8 of the wind"
	case synthetic.FaultSpikes:
		return "has spikes"
	case synthetic.FaultDrops:
		return "loses 30 to 90 % of its data"
	case synthetic.FaultClock, synthetic.FaultLate: // not in a study
	}
	return string(r.Fault)
}

// class of a share, as in "20 to 25".
func (c ClassShare) class() string {
	if c.To == 0 && c.From > 0 {
		return fmt.Sprintf("%.0f and more", c.From)
	}
	return fmt.Sprintf("%.0f to %.0f", c.From, c.To)
}

func (f *Findings) text(b *strings.Builder, accepted float64) {
	fmt.Fprintf(b, "\n%d episodes of 20 minutes from seed %d, %d of them with a broken instrument; level 2 at %.0f kt with\nconfidence %.2f.", f.Episodes, f.Seed, f.Faulty, f.Large, f.Confidence)
	if f.Partial {
		fmt.Fprintf(b, " PARTIAL: %d were asked for.", f.Planned)
	}
	b.WriteString("\n")
	if !f.WindyOnly {
		f.detectionText(b)
	}
	f.falselyText(b)
	if !f.WindyOnly {
		f.relianceText(b)
		f.estimatesText(b)
		f.choicesText(b, accepted)
	}
}

func (f *Findings) detectionText(b *strings.Builder) {
	b.WriteString("\nLosses of headwind on observed ground: level 2 or more found\n")
	for _, c := range f.Detection {
		fmt.Fprintf(b, "  %-12s kt  %s\n", c.class(), c.words())
	}
	fmt.Fprintf(b, "Losses of %.0f kt or more:\n", f.Large*4/3)
	for _, s := range append([]NamedShare{{"all on observed ground", f.Strong}, {"all on the whole path", f.StrongWhole}, {"without eddies", f.Calm}, {"with eddies", f.Eddying},
		{"all instruments sound", f.Sound}, {"one broken", f.Broken}}, f.Shapes...) {
		fmt.Fprintf(b, "  %-28s  %s\n", s.Name, s.words())
	}
	b.WriteString("... by where the outflow stood, counted on the whole path:\n")
	for _, c := range f.Along {
		if c.Cases > 0 {
			fmt.Fprintf(b, "  %6.0f to %5.0f m before the threshold   %s\n", c.From, c.To, c.words())
		}
	}
	fmt.Fprintf(b, "\nDelay from %.0f kt to level 2: %s\n", f.Large, f.Delay.words())
	fmt.Fprintf(b, "  outflows, all masts sound: %s\n  a test that knows size and place, opening falsely as often (z %.2f): %s\n",
		f.Same.words(), f.Reference.Limit, f.Reference.words())
}

func (f *Findings) falselyText(b *strings.Builder) {
	b.WriteString("\nFalse openings of level 2 or more in 100 path-hours of windy weather, all instruments sound (a loss or a gain)\n")
	for _, w := range f.False {
		with := "without eddies"
		if w.Eddies {
			with = "with eddies"
		}
		fmt.Fprintf(b, "  %2.0f to %2.0f kt, %-15s %s\n", quantity.Knots(w.From), quantity.Knots(w.To), with, w.Both.words())
	}
	for _, w := range f.ByWind {
		fmt.Fprintf(b, "  %2.0f to %2.0f kt, %-15s %s\n", quantity.Knots(w.From), quantity.Knots(w.To), "either", w.Both.words())
	}
	b.WriteString("... in any wind, with one instrument broken\n")
	for _, r := range f.Faults {
		if r.Hours > 0 {
			fmt.Fprintf(b, "  %-29s %s\n", r.what(), r.words())
		}
	}
	fmt.Fprintf(b, "... in all, sound or not: %s\n", f.Windy.words())
}

func (f *Findings) relianceText(b *strings.Builder) {
	fmt.Fprintf(b, "\nTold probability of a loss of %.0f kt or more, and how often there was one\n  (all instruments sound; one broken)\n", f.Large)
	for k, c := range f.Sure {
		if u := f.Unsure[k]; c.Cases+u.Cases > 0 {
			fmt.Fprintf(b, "  %2.0f to %3.0f in 100  %s steps; %s\n", c.From, c.To, c.words(), u.words())
		}
	}
	coverageText(b, "where the median told was", f.Told)
	coverageText(b, "where the true loss was", f.Coverage)
}

func coverageText(b *strings.Builder, where string, classes []Coverage) {
	fmt.Fprintf(b, "\nThe 5-95 %% interval holds the true loss, %s\n", where)
	for _, c := range classes {
		if c.Steps > 0 {
			fmt.Fprintf(b, "  %-12s kt  in %4.1f %% of %d steps; lies above it in %4.1f %%, below it in %4.1f %%\n",
				ClassShare{From: c.From, To: c.To}.class(), 100*c.Inside, c.Steps, 100*c.Above, 100*c.Below)
		}
	}
}

func (d Delay) words() string {
	if d.Cases == 0 {
		return "none met"
	}
	return fmt.Sprintf("median %.0f s, 90th percentile %.0f s (%d, %d never)", d.Median, d.P90, d.Cases, d.Missed)
}

func (f *Findings) estimatesText(b *strings.Builder) {
	f.Centre.text(b, "Centre of an outflow among the masts", "m")
	f.Arrival.text(b, "Gust front at a threshold, one minute ahead", "s")
	if f.Ground == nil {
		return
	}
	fmt.Fprintf(b, "\nBlind ground: an outflow that stays, on each place of a grid of %.0f m, up to 1.5 km beside the paths\n", f.Ground.Step)
	for _, c := range f.Ground.Counts {
		fmt.Fprintf(b, "  %2.0f kt, radius %4.0f m: seen on %d places, unseen on %d, outside of what is observed on %d\n", c.Strength, c.Radius, c.Seen, c.Unseen, c.Outside)
	}
}

func (o Off) text(b *strings.Builder, what, unit string) {
	switch {
	case o.Cases == 0:
	case o.Told == 0:
		fmt.Fprintf(b, "\n%s: told in none of %d\n", what, o.Cases)
	default:
		fmt.Fprintf(b, "\n%s: told in %d of %d, off by %.0f %s (median), %.0f %s (90th percentile)\n", what, o.Told, o.Cases, o.Median, unit, o.P90, unit)
	}
}

// choicesText shows some of the choices: all of them are in the JSON.
func (f *Findings) choicesText(b *strings.Builder, accepted float64) {
	fmt.Fprintf(b, "\nOther choices: changes of %.0f kt or more found, and false openings in 100 path-hours with sound instruments\n", f.Large*4/3)
	for _, c := range f.Sweep {
		even := (c.Level%2 == 0 || c.InForce) && (c.Confidence == 0.6 || c.Confidence == 0.8 || c.Confidence == 0.9)
		if !even && !c.InForce || c.Level > 20 {
			continue
		}
		mark := ""
		if c.InForce {
			mark = "  <- in force"
		}
		fmt.Fprintf(b, "  %2d kt, %.2f:  %-32s  %.2f (at most %.2f)%s\n", c.Level, c.Confidence, c.Detection.words(), c.Per100, c.Per100High, mark)
	}
	b.WriteString("\n" + strings.Join(f.ConfigurationLines(accepted), "\n") + "\n")
}

// ConfigurationLines are the levels that find most among those that open
// falsely no more often than is accepted, as a configuration writes them.
func (f *Findings) ConfigurationLines(accepted float64) []string {
	if f.Chosen == nil {
		return []string{
			fmt.Sprintf("# No choice is shown to keep false openings at or below %.2f in 100 path-hours: play more episodes,", accepted),
			"# accept more of them, or add a mast.",
		}
	}
	c := f.Chosen
	return []string{
		fmt.Sprintf("# Finds most among the choices shown to keep false openings at or below %.2f in 100 path-hours:", accepted),
		fmt.Sprintf("# %s of changes of %.0f kt or more; %.2f false openings, at most %.2f.", c.Detection.words(), f.Large*4/3, c.Per100, c.Per100High),
		"[alerts]",
		fmt.Sprintf("large_change = \"%d kt\"", c.Level),
		fmt.Sprintf("confidence   = %g", c.Confidence),
	}
}

func (c *Comparison) text(b *strings.Builder, first, second string) {
	fmt.Fprintf(b, "\n%s and %s in the same weather\n", first, second)
	fmt.Fprintf(b, "  found of what crossed the paths   %s\n", c.First.words())
	fmt.Fprintf(b, "                                    %s\n", c.Second.words())
	fmt.Fprintf(b, "  %s\n", c.Words())
	fmt.Fprintf(b, "  false openings in 100 path-hours  %s\n                                    %s\n", c.FalseFirst.words(), c.FalseSecond.words())
}

// Words of the difference, in a sentence.
func (c *Comparison) Words() string {
	low, high, word := c.Low, c.High, "more"
	if c.Gain < 0 {
		low, high, word = -c.High, -c.Low, "less"
	}
	if low <= 0 {
		return fmt.Sprintf("The second finds %.2f %s of it, which may be chance: anything from %.2f the other way to %.2f would fit.", max(c.Gain, -c.Gain), word, -low, high)
	}
	return fmt.Sprintf("The second finds %.2f (%.2f to %.2f) %s of it.", max(c.Gain, -c.Gain), low, high, word)
}
