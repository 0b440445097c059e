package main

import (
	"fmt"
	"io"
	"strings"

	"sockline/alerting/airfield"
)

// print writes the report for reading.
func (r checkReport) print(w io.Writer) error {
	var b strings.Builder
	fmt.Fprintf(&b, "%s (%s): the configuration is in order.\n\n", r.Name, r.Airfield)
	if r.Variation != nil {
		fmt.Fprintf(&b, "Magnetic variation on %s: %s, from %s.\n", r.Date, variationWords(*r.Variation), r.VariationFrom)
	}
	b.WriteString("\nMasts, in metres from the reference point\n")
	for _, s := range r.Stations {
		fmt.Fprintf(&b, "  %-12s %7.0f m east %7.0f m north, anemometer %.1f m above the ground, topic %s\n", s.ID, s.East, s.North, s.Height, s.Topic)
	}
	for _, p := range r.Paths {
		p.print(&b)
	}
	r.printLevels(&b)
	r.printOthers(&b)
	r.printTold(&b)
	if len(r.Warnings) > 0 {
		b.WriteString("\nTo be noted\n")
		for _, warning := range r.Warnings {
			fmt.Fprintf(&b, "  %s\n", warning)
		}
	}
	_, err := fmt.Fprintf(w, "%s\n%s\n", b.String(), r.Notice)
	return err
}

// print writes one path.
func (p checkPath) print(b *strings.Builder) {
	fmt.Fprintf(b, "\n%s %s: %.1f degrees true", upperFirst(p.Operation), p.Runway, p.BearingTrue)
	if p.BearingMagnetic != nil {
		fmt.Fprintf(b, ", %.1f degrees magnetic", *p.BearingMagnetic)
	}
	fmt.Fprintf(b, "; the path is %.0f m long\n", p.Length)
	fmt.Fprintf(b, "  observed while all masts are live: %s\n", pairWords(p.Observed, "nothing"))
	fmt.Fprintf(b, "  not observed even then: %s\n", pairWords(p.NotObserved, "nothing of it is left out"))
	word := "it is observed"
	if !p.NeededObserved {
		word = "it is NOT observed"
	}
	fmt.Fprintf(b, "  needed for any statement: %s; %s\n", stretchWords(p.Needed), word)
	for _, s := range p.Beside {
		side, right := "right", s.Right
		if right < 0 {
			side, right = "left", -right
		}
		fmt.Fprintf(b, "  mast %-12s %s, %.0f m to the %s\n", s.ID, beforeWords(s.Before), right, side)
	}
	if len(p.Glide) == 0 {
		return
	}
	b.WriteString("  height of the glide path, and what a mast can say of the wind there:\n")
	for i, g := range p.Glide {
		words := mastWords(g.Height)
		if i > 0 && words == mastWords(p.Glide[i-1].Height) {
			words = "the same"
		}
		fmt.Fprintf(b, "    %4.0f m at %4.0f m before the threshold: %s\n", g.Height, g.Before, words)
	}
}

// mastWords is what a measurement at mast height says of the wind at a height
// above the threshold (m). An outflow blows hardest 30 to 150 m up; what of
// that is felt at 10 m depends on the profile taken: for a greatest wind at
// 30 m 0.72 (Oseguera and Bowles 1988) to 0.94 (Wood and others 2001), at
// 150 m 0.21 to 0.75 (both equations from memory; the ratios are computed from
// them).
func mastWords(height float64) string {
	switch {
	case height < 30:
		return "near mast height"
	case height < 150:
		return "where an outflow blows hardest: the mast may feel a fifth to nine tenths of it"
	}
	return "above the greatest wind of most outflows: the mast sees what flows out below"
}

// printLevels writes what the levels stand for.
func (r checkReport) printLevels(b *strings.Builder) {
	l := r.Levels
	fmt.Fprintf(b, "\nLevels; each opens when its probability reaches %g\n", l.Confidence)
	fmt.Fprintf(b, "  1 noticeable     a loss or gain of headwind of %.1f kt or more\n", l.Noticeable)
	fmt.Fprintf(b, "  2 large          of %.1f kt or more\n", l.Large)
	origin := "as configured"
	switch {
	case l.MarginRaised:
		origin = "the least there is"
	case l.MarginDerived:
		origin = fmt.Sprintf("the stall margin, 23 %% of the slowest approach at %.1f kt", l.Slowest)
	}
	fmt.Fprintf(b, "  3 beyond-margin  a loss of %.1f kt or more (%s),\n", l.Margin, origin)
	fmt.Fprintf(b, "                   or F-bar %.2f: a loss of %.1f kt over 1 km at %.1f kt, the fastest approach, in still air\n", l.FBar, l.FBarLoss, l.Fastest)
}

func variationWords(deg float64) string {
	switch {
	case deg < 0:
		return fmt.Sprintf("%.1f degrees west", -deg)
	case deg > 0:
		return fmt.Sprintf("%.1f degrees east", deg)
	}
	return "0.0 degrees"
}

// pairWords lists stretches of a path, or says none.
func pairWords(intervals [][2]float64, none string) string {
	if len(intervals) == 0 {
		return none
	}
	words := make([]string, len(intervals))
	for i, interval := range intervals {
		words[i] = stretchWords(interval)
	}
	return strings.Join(words, "; ")
}

func intervalWords(intervals []airfield.Interval) string {
	return pairWords(pairs(intervals), "nothing")
}

// stretchWords is a stretch of a path without signs, in the direction of
// flight.
func stretchWords(i [2]float64) string {
	from, to := i[0], i[1]
	switch {
	case from > 0.5 && to > 0.5:
		return fmt.Sprintf("%.0f to %.0f m before the threshold", from, to)
	case from < -0.5 && to < -0.5:
		return fmt.Sprintf("%.0f to %.0f m beyond the threshold", -from, -to)
	}
	return "from " + beforeWords(from) + " to " + beforeWords(to)
}

// beforeWords is a place on a path without signs.
func beforeWords(m float64) string {
	switch {
	case m > 0.5:
		return fmt.Sprintf("%.0f m before the threshold", m)
	case m < -0.5:
		return fmt.Sprintf("%.0f m beyond the threshold", -m)
	}
	return "the threshold"
}
