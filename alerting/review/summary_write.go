package review

import (
	_ "embed"
	"fmt"
	"html/template"
	"io"
	"math"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/alerting/contingency"
)

//go:embed summary.html
var summaryPage string

//go:embed sheet.css
var sheetStyle string

// WriteSummaryHTML writes a summary as one page that needs nothing else, for a
// screen or for paper.
func WriteSummaryHTML(w io.Writer, u Summary) error {
	t, err := template.New("summary").Funcs(template.FuncMap{
		"css":    func() template.CSS { return template.CSS(sheetStyle) },
		"day":    func(t time.Time) string { return t.UTC().Format("2006-01-02") },
		"stamp":  func(t time.Time) string { return t.UTC().Format("2006-01-02 15:04:05") },
		"figure": figureText, "percent": percentText, "share": shareText,
		"lead": summaryLead, "attention": attentionText, "verified": verifiedText, "fellrose": fellRose, "open": openFor,
		"named": func(name string, rates []Rate) any {
			return struct {
				Name  string
				Rates []Rate
			}{name, rates}
		},
		"hours": hourBars,
	}).Parse(summaryPage)
	if err != nil {
		return fmt.Errorf("prepare the page of a summary: %w", err)
	}
	if err := t.Execute(w, u); err != nil {
		return fmt.Errorf("write a summary: %w", err)
	}
	return nil
}

// summaryLead is the period in a few sentences.
func summaryLead(u Summary) []string {
	first := fmt.Sprintf("%s hours were judged, %s of the time.", hoursText(u.Hours), percentText(&u.Share))
	second := "No alert was opened."
	if u.Alerts > 0 {
		second = fmt.Sprintf("%s in %s opened: %s in 100 judged hours.", upperFirst(alertsInWords(u.Alerts)),
			plural(u.Occurrences, "occurrence"), figureText(u.Per100))
	}
	beyond := 0
	for _, f := range u.Load.Figures {
		if !f.Within {
			beyond++
		}
	}
	third := "The load of alerts stayed within every published figure."
	if beyond > 0 {
		third = fmt.Sprintf("The load of alerts lay beyond %d of the %d published figures.", beyond, len(u.Load.Figures))
	}
	return []string{first + " " + second, third}
}

func hoursText(h float64) string {
	if h < 10 {
		return fmt.Sprintf("%.1f", h)
	}
	return fmt.Sprintf("%.0f", h)
}

func upperFirst(s string) string {
	if s == "" {
		return s
	}
	return strings.ToUpper(s[:1]) + s[1:]
}

func plural(n int, one string) string {
	if n == 1 {
		return "1 " + one
	}
	return fmt.Sprintf("%d %ss", n, one)
}

func figureText(v *float64) string {
	switch {
	case v == nil:
		return "-"
	case *v == math.Trunc(*v) && math.Abs(*v) < 1e9:
		return fmt.Sprintf("%.0f", *v)
	case math.Abs(*v) < 0.1:
		return fmt.Sprintf("%.3f", *v)
	}
	return fmt.Sprintf("%.2f", *v)
}

func percentText(v *float64) string {
	if v == nil {
		return "-"
	}
	p := *v * 100
	if p < 100 && p > 99.95 { // not all of it
		p = 99.9
	}
	return fmt.Sprintf("%.1f %%", p)
}

func shareText(i contingency.Interval) string {
	if i.Value == nil {
		return "-"
	}
	return fmt.Sprintf("%.2f (%.2f to %.2f)", *i.Value, *i.Low, *i.High)
}

func attentionText(u Summary) string {
	a := u.Attention
	if u.Occurrences == 0 {
		return "There was nothing to acknowledge."
	}
	s := fmt.Sprintf("%d of %s acknowledged (%s).", int(math.Round(*a.Acknowledged.Value*float64(a.Acknowledged.Of))),
		plural(u.Occurrences, "occurrence"), percentText(a.Acknowledged.Value))
	if a.MedianS != nil {
		s += fmt.Sprintf(" Half of them within %.0f s of the opening, nine of ten within %.0f s.", *a.MedianS, *a.NinetiethS)
	}
	return s + fmt.Sprintf(" %s put aside for a while. %s.", timesText(a.Shelved), upperFirst(map[bool]string{true: "no note was written", false: "written: " + plural(a.Notes, "note")}[a.Notes == 0]))
}

func timesText(n int) string {
	switch n {
	case 0:
		return "None was"
	case 1:
		return "One was"
	}
	return fmt.Sprintf("%d were", n)
}

func verifiedText(v Verification) string {
	if v.Reports == 0 {
		return fmt.Sprintf("No crew reported. %s unverified, which is not false.", theyAre(v.Unverified))
	}
	s := fmt.Sprintf("%s. %s unverified, which is not false.", upperFirst(plural(v.Reports, "report")), theyAre(v.Unverified))
	if v.NotObserved > 0 {
		s += fmt.Sprintf(" In %s a change was felt where nothing was observed: neither found nor missed.", plural(v.NotObserved, "report"))
	}
	if v.Amount.N > 0 {
		s += fmt.Sprintf(" Where both have a figure (%d times) the crew felt %.1f kt %s than was told at the greatest, root mean square %.1f kt.",
			v.Amount.N, math.Abs(*v.Amount.MeanKt), map[bool]string{true: "more", false: "less"}[*v.Amount.MeanKt >= 0], *v.Amount.RMSKt)
	}
	return s
}

func theyAre(n int) string {
	if n == 1 {
		return "One alert is"
	}
	return fmt.Sprintf("%d alerts are", n)
}

// fellRose is a change in words: its direction is never left to a sign.
func fellRose(kind string, kt float64) string {
	amount := fmt.Sprintf("%.0f kt", math.Abs(kt))
	switch kind {
	case string(alerting.HeadwindLoss):
		return "headwind fell by " + amount
	case string(alerting.HeadwindGain):
		return "headwind rose by " + amount
	}
	return kind + ", " + amount
}

func openFor(l Life) string {
	d := l.end().Sub(l.Opened).Round(time.Second)
	if l.Closed == nil {
		return "still open"
	}
	return d.String()
}

// hourBars draws alerts by the hour.
func hourBars(rates []Rate) template.HTML {
	most := 1
	for _, r := range rates {
		most = max(most, r.Alerts)
	}
	var b strings.Builder
	b.WriteString(`<svg viewBox="0 0 720 130" role="img" aria-label="alerts by the hour of the day">`)
	for i, r := range rates {
		x, h := 10+i*29, 90*float64(r.Alerts)/float64(most)
		fmt.Fprintf(&b, `<rect x="%d" y="%.1f" width="22" height="%.1f" fill="#56616b"/>`, x, 105-h, h)
		fmt.Fprintf(&b, `<text x="%d" y="120" text-anchor="middle">%s</text>`, x+11, template.HTMLEscapeString(r.Name))
		if r.Alerts > 0 {
			fmt.Fprintf(&b, `<text x="%d" y="%.1f" text-anchor="middle">%d</text>`, x+11, 102-h, r.Alerts)
		}
	}
	b.WriteString(`<line x1="6" y1="105" x2="714" y2="105" stroke="#1a1a1a"/></svg>`)
	return template.HTML(b.String())
}

// WriteSummaryText prints a summary for a terminal.
func WriteSummaryText(w io.Writer, u Summary) error {
	var b strings.Builder
	fmt.Fprintf(&b, "%s: what was told from %s to %s UTC\n\n", u.Airfield, u.From.UTC().Format("2006-01-02 15:04"), u.To.UTC().Format("2006-01-02 15:04"))
	if u.Exercise > 0 {
		fmt.Fprintf(&b, "EXERCISE: %s.\n", map[bool]string{true: "every alert in this time was one of an exercise",
			false: fmt.Sprintf("%d alerts of exercises are left out", u.Exercise)}[u.Exercise >= u.Alerts])
	}
	for _, s := range summaryLead(u) {
		fmt.Fprintln(&b, s)
	}
	for _, table := range []struct {
		name  string
		rates []Rate
	}{{"path", u.ByPath}, {"highest level", u.ByLevel}, {"kind", u.ByKind}, {"cause", u.ByCause}, {"month", u.ByMonth}, {"hour (UTC)", withAlerts(u.ByHour)}, {"source", u.Load.Sources}} {
		if len(table.rates) == 0 {
			continue
		}
		fmt.Fprintf(&b, "\n%-34s %7s %15s\n", "by "+table.name, "alerts", "in 100 hours")
		for _, r := range table.rates {
			fmt.Fprintf(&b, "  %-32s %7d %15s\n", r.Name, r.Alerts, figureText(r.Per100))
		}
	}
	fmt.Fprintf(&b, "\n%s\n\n%-60s %9s %9s %9s\n", attentionText(u), "load", "value", "bearable", "at most")
	for _, f := range u.Load.Figures {
		mark := ""
		if !f.Within {
			mark = "  beyond"
		}
		fmt.Fprintf(&b, "  %-58s %9s %9s %9s%s\n", f.Name, figureText(f.Value), figureText(f.Acceptable), figureText(f.Most), mark)
	}
	fmt.Fprintf(&b, "  (%s)\n\n%-20s %10s %10s %10s %6s %12s\n", u.Load.Source, "mast", "available", "readings", "late", "gaps", "longest")
	for _, s := range u.Stations {
		fmt.Fprintf(&b, "  %-18s %10s %10d %10d %6d %10d s\n", s.ID, percentText(s.Share), s.Readings, s.Late, s.Gaps, s.LongestS)
	}
	fmt.Fprintf(&b, "\n%s\n", verifiedText(u.Verified))
	if u.Verified.Reports > 0 {
		fmt.Fprintf(&b, "%-24s %5s %6s %7s %6s  %-22s %-22s %s\n", "  level", "hits", "false", "missed", "none", "found (POD)", "false of told (FAR)", "CSI")
		for _, l := range u.Verified.ByLevel {
			fmt.Fprintf(&b, "  %-22s %5d %6d %7d %6d  %-22s %-22s %s\n", fmt.Sprintf("%s, %g kt", l.Level, l.ChangeKt), l.Table.Hits, l.Table.FalseAlarms,
				l.Table.Misses, l.Table.CorrectNulls, shareText(l.Scores.POD), shareText(l.Scores.FAR), shareText(l.Scores.CSI))
		}
	}
	for _, f := range u.Faults {
		fmt.Fprintf(&b, "\nnote: %s\n", f)
	}
	_, err := fmt.Fprintf(w, "%s\n%s\n", b.String(), u.Notice)
	return err
}

// withAlerts leaves out what no alert falls to.
func withAlerts(rates []Rate) (out []Rate) {
	for _, r := range rates {
		if r.Alerts > 0 {
			out = append(out, r)
		}
	}
	return out
}
