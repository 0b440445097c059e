package review

import (
	"cmp"
	"math"
	"slices"
	"time"

	"sockline/alerting"
	"sockline/sensors"
)

// Load is how much the alerts ask of those who hear them, against the figures
// that ANSI/ISA-18.2 and IEC 62682 give for one position (from memory). What
// calls a person is an occurrence; what chatters or stands too long is an alert.
type Load struct {
	Figures []Figure `json:"figures"`
	Sources []Rate   `json:"top_sources"` // the ten that alert most
	Source  string   `json:"source"`
}

// Figure is a measure against what is thought bearable.
type Figure struct {
	Name       string   `json:"name"`
	Value      *float64 `json:"value"`
	Unit       string   `json:"unit"`
	Acceptable *float64 `json:"acceptable"` // nil where there is no figure
	Most       *float64 `json:"most"`       // the most that is manageable
	Within     bool     `json:"within"`     // of the acceptable one, or nothing to hold it against
}

const (
	floodMore   = 10 // occurrences
	floodSpan   = 10 * time.Minute
	chatterMore = 3 // openings of one path and kind
	chatterSpan = time.Minute
	fleeting    = 10 * time.Second
	stale       = 24 * time.Hour
)

// LoadOf measures the load of alerts that opened in [from, to), in the order of
// their openings, over so many judged hours.
func LoadOf(lives []Life, from, to sensors.Instant, hours float64) Load {
	l := Load{Source: "ANSI/ISA-18.2, IEC 62682 and EEMUA 191, from memory", Sources: []Rate{}}
	calls := callsOf(lives)
	perHour := ratio(float64(len(calls)), hours)
	chatter, short, standing := 0, 0, 0
	bySource := map[string][]time.Time{}
	levels := [4]int{}
	for i := range lives {
		life := &lives[i]
		levels[life.highest]++
		key := life.Operation + " " + life.Runway + " " + life.Kind
		bySource[key] = append(bySource[key], life.Opened)
		open := life.end().Sub(life.Opened)
		if life.Closed != nil && open < fleeting {
			short++
		}
		if open > stale {
			standing++
		}
	}
	for _, times := range bySource {
		chatter += clustersOf(times, chatterMore, chatterSpan)
	}
	most, flooded := busiest(calls, floodSpan), floodTime(calls)
	add := func(name string, value *float64, unit string, limits ...float64) {
		f := Figure{Name: name, Value: value, Unit: unit, Within: true}
		if len(limits) > 0 {
			f.Acceptable = &limits[0]
			f.Within = value == nil || *value <= limits[0]
		}
		if len(limits) > 1 {
			f.Most = &limits[1]
		}
		l.Figures = append(l.Figures, f)
	}
	n := func(v int) *float64 { return finite(float64(v)) }
	add("occurrences a day, mean", times(perHour, 24), "per 24 judged hours", 150, 300)
	add("occurrences an hour, mean", perHour, "per judged hour", 6, 12)
	add("occurrences in ten minutes, mean", times(perHour, 1.0/6), "per ten judged minutes", 1, 2)
	add("most occurrences in ten minutes", n(most), "", 10)
	add("share of the time in flood (more than 10 in ten minutes)", ratio(flooded.Seconds(), hours*3600), "of the judged time", 0.01)
	add("chattering (three openings of one source within a minute)", n(chatter), "times", 0)
	add("fleeting (open for less than 10 s)", n(short), "alerts", 0)
	add("standing (open for more than 24 h)", n(standing), "alerts", 0, 5)
	add("share of level 3", ratio(float64(levels[alerting.BeyondMargin]), float64(len(lives))), "of the alerts", 0.05)
	for key, times := range bySource {
		r := Rate{Name: key, Alerts: len(times)}
		if hours > 0 {
			r.Per100 = finite(100 * float64(len(times)) / hours)
		}
		l.Sources = append(l.Sources, r)
	}
	slices.SortFunc(l.Sources, func(a, b Rate) int { return cmp.Or(cmp.Compare(b.Alerts, a.Alerts), cmp.Compare(a.Name, b.Name)) })
	l.Sources = l.Sources[:min(10, len(l.Sources))]
	return l
}

// callsOf is when each occurrence began.
func callsOf(lives []Life) []time.Time {
	seen := map[string]bool{}
	var calls []time.Time
	for i := range lives {
		if !seen[lives[i].Occurrence] {
			seen[lives[i].Occurrence] = true
			calls = append(calls, lives[i].Opened)
		}
	}
	return calls
}

func ratio(a, b float64) *float64 {
	if b <= 0 {
		return nil
	}
	return finite(a / b)
}

func finite(v float64) *float64 {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return nil
	}
	return &v
}

func times(v *float64, k float64) *float64 {
	if v == nil {
		return nil
	}
	return finite(math.Round(*v*k*1e6) / 1e6)
}

// busiest is the most of ascending moments within a span.
func busiest(moments []time.Time, span time.Duration) int {
	most, first := 0, 0
	for i, t := range moments {
		for t.Sub(moments[first]) >= span {
			first++
		}
		most = max(most, i-first+1)
	}
	return most
}

// clustersOf counts the moments that are the last of at least more within a
// span.
func clustersOf(moments []time.Time, more int, span time.Duration) (n int) {
	for i := more - 1; i < len(moments); i++ {
		if moments[i].Sub(moments[i-more+1]) < span {
			n++
		}
	}
	return n
}

// floodTime is how long more than floodMore calls lay within the floodSpan
// before.
func floodTime(calls []time.Time) (total time.Duration) {
	var until time.Time
	for i := floodMore; i < len(calls); i++ {
		if calls[i].Sub(calls[i-floodMore]) >= floodSpan {
			continue
		}
		begin := calls[i]
		end := calls[i-floodMore].Add(floodSpan) // from then on one of them is past
		if begin.Before(until) {
			begin = until
		}
		if end.After(begin) {
			total += end.Sub(begin)
			until = end
		}
	}
	return total
}
