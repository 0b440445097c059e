package survey

import (
	"fmt"
	"math"

	"sockline/alerting"
)

// Report is a whole survey: of one network, or of two that met the same
// weather.
type Report struct {
	Format     int         `json:"survey"` // version of the format
	Made       string      `json:"made"`
	Version    string      `json:"version"`
	Command    string      `json:"command"`
	Accepted   float64     `json:"accepted_false_openings_per_100_hours"`
	Results    []Result    `json:"networks"`
	Comparison *Comparison `json:"comparison,omitempty"`
	Caveats    []string    `json:"caveats"`
	Exercise   bool        `json:"exercise"` // always: nothing of it was measured
	Notice     string      `json:"notice"`
}

// Result is what is known of one network.
type Result struct {
	Layout   Layout    `json:"layout"`
	Design   *Design   `json:"design"`
	Findings *Findings `json:"findings,omitempty"` // nil: no episode was asked for
}

// Layout is where things stand, metres east and north of the reference point.
type Layout struct {
	Name    string          `json:"name"`
	Runways [][2][2]float64 `json:"runways"`
	Ends    [][2]string     `json:"designators"`
	Paths   []LayoutPath    `json:"paths"` // with ground of their own
	Masts   []LayoutMast    `json:"masts"`
}

// LayoutPath is the ground of a path, from far to near.
type LayoutPath struct {
	Name     string          `json:"path"`
	From     [2]float64      `json:"from"`
	To       [2]float64      `json:"to"`
	Observed [][2][2]float64 `json:"observed"`
}

// LayoutMast is where a mast stands.
type LayoutMast struct {
	ID   string  `json:"id"`
	East float64 `json:"east_m"`
	Nor  float64 `json:"north_m"`
}

// LayoutOf is the layout of a network.
func LayoutOf(n *Network) Layout {
	a := n.Settings.Airfield
	at := func(x, y float64) [2]float64 { return [2]float64{math.Round(x), math.Round(y)} }
	l := Layout{Name: n.Name}
	for _, r := range a.Runways {
		l.Runways = append(l.Runways, [2][2]float64{at(r.Ends[0].Threshold.X, r.Ends[0].Threshold.Y), at(r.Ends[1].Threshold.X, r.Ends[1].Threshold.Y)})
		l.Ends = append(l.Ends, [2]string{r.Ends[0].Designator, r.Ends[1].Designator})
	}
	for _, g := range grounds(n) {
		e := g.p.Extent()
		p := LayoutPath{Name: g.p.Name(), From: at(g.p.At(e.From)), To: at(g.p.At(e.To)), Observed: [][2][2]float64{}}
		for i := 0; i < len(g.before); i++ {
			j := i
			for j < len(g.before) && g.observed[j] {
				j++
			}
			if j > i {
				p.Observed = append(p.Observed, [2][2]float64{at(g.p.At(g.before[i])), at(g.p.At(g.before[j-1]))})
				i = j
			}
		}
		l.Paths = append(l.Paths, p)
	}
	for _, m := range a.Masts {
		l.Masts = append(l.Masts, LayoutMast{ID: m.ID, East: math.Round(m.X), Nor: math.Round(m.Y)})
	}
	return l
}

// Finish fills in what every report says of itself.
func (r *Report) Finish() {
	r.Format, r.Exercise, r.Notice = 2, true, alerting.Notice
	r.Caveats = r.caveats()
}

// caveats are what a reader must know before anything is decided.
func (r *Report) caveats() []string {
	c := []string{
		"All weather here is drawn from published models and statistics; none of it was measured at this airfield. Real outflows are less regular, and the ground of an airfield (slopes, woods, buildings, a shore) is not in the models.",
		"Changes are those of the wind at 10 m. An outflow blows hardest some tens of metres above the ground: the change in flight may be larger.",
		"An outflow that has not reached the ground, or is smaller than the gap between two masts, can be missed by any network of masts.",
		"Strengths are drawn after microbursts that a radar study sought out (Wilson and others, 1984). How often they come to this airfield is not known: shares of what is found hold for an outflow that does come, and say nothing of how many come.",
		"Paths that look at the same ground count once. Intervals hold 95 %; those of shares are Wilson's, widened because the paths of one episode share its weather; those of rates come from episodes drawn anew.",
		"The figures of the section that needs no episode rest on one Gaussian picture of disturbed air: compare them with one another, and take none of them for an error that will be seen.",
		"Whether a mast may stand on a place (obstacle limits, land, power, what is upwind of it) is for others to decide.",
	}
	for _, x := range r.Results {
		f := x.Findings
		if f == nil {
			continue
		}
		if f.Partial {
			c = append([]string{fmt.Sprintf("Partial result for %s: the survey was interrupted after %d of %d episodes. Rare things are not in it yet.", f.Network, f.Episodes, f.Planned)}, c...)
		}
		if f.Tuning {
			c = append([]string{fmt.Sprintf("The seeds from %d on are not all between %d and %d: among these episodes are some to tune on. Do not report figures from them.", f.Seed, ReportingSeed, TuningSeed-1)}, c...)
		}
		if f.Episodes < fewEpisodes {
			c = append([]string{fmt.Sprintf("Only %d episodes were played over %s: the intervals are wide. 2000 or more are usual.", f.Episodes, f.Network)}, c...)
		}
	}
	return c
}

// fewEpisodes is what a report warns of.
const fewEpisodes = 500
