package main

import (
	"fmt"
	"strings"

	"sockline/alerting/vertical"
	"sockline/config"
)

// checkOthers is what is judged besides the headwind along the paths. A limit
// that is not set is null.
type checkOthers struct {
	WindShift float64       `json:"wind_shift_deg"`
	Vertical  *string       `json:"vertical_shear"`
	Crosswind *float64      `json:"crosswind_limit_kt"`
	Tailwind  *float64      `json:"tailwind_limit_kt"`
	Siting    bool          `json:"siting_removed"`
	Columns   []checkColumn `json:"columns"`
}

// checkColumn is two levels of one column of air, one above the other.
type checkColumn struct {
	Lower   string  `json:"lower"`
	Upper   string  `json:"upper"`
	Apart   float64 `json:"apart_m"`
	Per100  bool    `json:"per_100ft"` // a figure per 100 ft may be told
	Classed bool    `json:"class"`     // and a class, so that an alert can open
}

// others says what is judged besides, and what a tower counts for.
func (r *checkReport) others(cfg *config.Config) {
	a := cfg.Alerts
	o := checkOthers{WindShift: a.WindShift, Siting: cfg.Analysis.RemoveSiting, Columns: []checkColumn{}}
	if a.VerticalShear != vertical.Unclassed {
		word := a.VerticalShear.String()
		o.Vertical = &word
	}
	limit := func(ms float64) *float64 {
		if ms <= 0 {
			return nil
		}
		kt := tenthKnots(ms)
		return &kt
	}
	o.Crosswind, o.Tailwind = limit(a.CrosswindLimit), limit(a.TailwindLimit)
	masts := cfg.Airfield.Masts
	for _, column := range cfg.Airfield.Columns() {
		for k := 1; k < len(column); k++ {
			low, high := masts[column[k-1]], masts[column[k]]
			// The rules are those of the analysis itself, asked with no wind.
			s := vertical.Between(vertical.Level{Height: low.Height, Roughness: 0.03}, vertical.Level{Height: high.Height, Roughness: 0.03}, false)
			o.Columns = append(o.Columns, checkColumn{low.ID, high.ID, tenth(high.Height - low.Height), s.RateKnown, s.Class != vertical.Unclassed})
		}
	}
	for i, aloft := range cfg.Airfield.Aloft() {
		if aloft {
			r.warn("Station %s counts for the wind with height only: on its tower another level, nearer to 10 m, stands for the wind along the ground.", masts[i].ID)
		}
	}
	r.Others = o
}

// printOthers writes it.
func (r checkReport) printOthers(b *strings.Builder) {
	o := r.Others
	b.WriteString("\nBesides the headwind along the paths\n")
	fmt.Fprintf(b, "  wind shift       a turn of %.0f degrees or more with %.0f kt before or after it; from 60 degrees level 2\n", o.WindShift, 10.0)
	if len(o.Columns) == 0 {
		b.WriteString("  vertical shear   not judged: no tower has two levels\n")
	}
	for _, c := range o.Columns {
		what := "told as measured only"
		switch {
		case c.Classed && o.Vertical == nil:
			what = "told with its class; alerts are switched off"
		case c.Classed:
			what = "told with its class; an alert opens from " + *o.Vertical + " on"
		case c.Per100:
			what = "told per 100 ft, without a class: no alert can open"
		}
		fmt.Fprintf(b, "  vertical shear   between %s and %s, %.0f m apart: %s\n", c.Lower, c.Upper, c.Apart, what)
	}
	for _, l := range []struct {
		name  string
		limit *float64
	}{{"crosswind", o.Crosswind}, {"tailwind", o.Tailwind}} {
		if l.limit == nil {
			fmt.Fprintf(b, "  %-16s not judged: no limit is set\n", l.name)
		} else {
			fmt.Fprintf(b, "  %-16s %.1f kt or more over two minutes at a runway end\n", l.name, *l.limit)
		}
	}
	if o.Siting {
		b.WriteString("  siting           what is learnt of the places of the masts is taken out of the analysis\n")
	}
}
