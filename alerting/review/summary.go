package review

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"slices"
	"time"

	"sockline/alerting"
	"sockline/alerting/contingency"
	"sockline/alerting/history"
	"sockline/alerting/judged"
	"sockline/sensors"
)

// SummaryOptions say what is summed up.
type SummaryOptions struct {
	Airfield  string
	Directory string          // of the history: what was judged lies beside it; empty: do without
	From, To  sensors.Instant // steps From <= T < To
	Changes   [4]float64      // of the levels, m/s, by alerting.Level
	Stations  []sensors.Station
	Software  string
	Progress  func(share float64) // told now and then; may be nil
	Stop      func() bool         // asked now and then whether to give up; may be nil
}

// Summary is what a period amounts to.
type Summary struct {
	Airfield    string         `json:"airfield"`
	From        time.Time      `json:"from"`
	To          time.Time      `json:"to"`
	Software    string         `json:"software"`
	Hours       float64        `json:"hours_judged"` // of which steps are stored
	Share       float64        `json:"share_judged"` // of the period
	Alerts      int            `json:"alerts"`
	Per100      *float64       `json:"alerts_per_100_hours"`
	Occurrences int            `json:"occurrences"`
	Exercise    int            `json:"exercise_alerts"` // left out of all figures, unless there is nothing else
	ByPath      []Rate         `json:"by_path"`
	ByLevel     []Rate         `json:"by_level"`
	ByKind      []Rate         `json:"by_kind"`
	ByCause     []Rate         `json:"by_cause"`
	ByHour      []Rate         `json:"by_hour"` // of the UTC day
	ByMonth     []Rate         `json:"by_month"`
	Attention   Attention      `json:"attention"`
	Stations    []Availability `json:"stations"`
	Load        Load           `json:"load"`
	Verified    Verification   `json:"verification"`
	Largest     []Life         `json:"largest"` // the ten greatest changes
	Faults      []string       `json:"faults"`  // what could not be read
	Notice      string         `json:"notice"`
}

// Rate is how many alerts fall to something, and how many that is in 100 hours
// that were judged; nil where none were.
type Rate struct {
	Name   string   `json:"name"`
	Alerts int      `json:"alerts"`
	Per100 *float64 `json:"per_100_hours"`
}

// Attention is how alerts were answered.
type Attention struct {
	Acknowledged contingency.Interval `json:"acknowledged"` // of the occurrences
	MedianS      *float64             `json:"median_s"`     // from the opening to the acknowledgement
	NinetiethS   *float64             `json:"ninetieth_s"`
	Shelved      int                  `json:"shelved"`
	Notes        int                  `json:"notes"`
}

// Availability is how much of a period a station served.
type Availability struct {
	ID       string   `json:"id"`
	Share    *float64 `json:"share"` // of the judged steps: a reading no older than its stale_after
	Readings int      `json:"readings"`
	Late     int      `json:"late"` // too late, rejected or repeated
	Gaps     int      `json:"gaps"`
	LongestS int      `json:"longest_gap_s"`
}

// Summarize sums a period up. What cannot be read is named in it; the error
// says that nothing could be made.
func Summarize(s *history.Store, o SummaryOptions) (Summary, error) {
	if o.From >= o.To {
		return Summary{}, errors.New("sum a period up: its end lies before its beginning")
	}
	out := Summary{Airfield: o.Airfield, From: o.From.Time(), To: o.To.Time(), Software: o.Software, Notice: alerting.Notice, Faults: []string{}}
	lives, err := Recorded(s, o.From, o.To)
	out.fault(err)
	lives = out.withoutExercise(lives)
	if err := out.readings(s, o); err != nil {
		return out, err
	}
	out.Share = out.Hours / (o.To.Sub(o.From).Hours())
	out.rates(lives, o)
	out.attention(s, lives, o)
	out.Load = LoadOf(lives, o.From, o.To, out.Hours)
	reports, err := PilotReports(s, o.From, o.To)
	out.fault(err)
	out.Verified = Verify(reports, lives, VerifyOptions{Changes: o.Changes, Observed: out.observed(o)})
	out.Largest = slices.Clone(lives)
	slices.SortStableFunc(out.Largest, func(a, b Life) int { return cmp.Compare(math.Abs(b.PeakKt), math.Abs(a.PeakKt)) })
	out.Largest = append([]Life{}, out.Largest[:min(10, len(out.Largest))]...)
	return out, nil
}

func (u *Summary) fault(err error) {
	if err != nil {
		u.Faults = append(u.Faults, err.Error())
	}
}

// withoutExercise leaves exercises out: they say nothing of the airfield. A
// history that holds nothing else is that of a trial, and counts.
func (u *Summary) withoutExercise(lives []Life) []Life {
	real := slices.DeleteFunc(slices.Clone(lives), func(l Life) bool { return l.Exercise })
	u.Exercise = len(lives) - len(real)
	if len(real) == 0 {
		return lives
	}
	return real
}

// readings counts steps, and what each station sent.
func (u *Summary) readings(s *history.Store, o SummaryOptions) error {
	type state struct {
		last    sensors.Instant // of its newest reading
		covered int
		Availability
	}
	at := map[string]*state{}
	var order []*state
	for i := range o.Stations {
		st := &state{Availability: Availability{ID: o.Stations[i].ID}}
		at[st.ID] = st
		order = append(order, st)
	}
	steps := 0
	first := o.From // of the stored steps
	err := s.Readings(o.From, o.To, func(step history.Step) error {
		if steps == 0 {
			first = step.At - sensors.Second
		}
		if steps++; steps%4096 == 0 {
			if o.Progress != nil {
				o.Progress(float64(step.At-o.From) / float64(o.To-o.From))
			}
			if o.Stop != nil && o.Stop() {
				return errStopped
			}
		}
		for _, r := range step.Readings {
			if st := stateOf(at, step.Stations, r.Station); st != nil {
				st.Readings++
				st.last = max(st.last, r.Time)
			}
		}
		for _, l := range step.Late {
			if st := stateOf(at, step.Stations, l.Reading.Station); st != nil {
				st.Late++
			}
		}
		for i, st := range order {
			age := step.At.Sub(max(st.last, first))
			switch {
			case st.last != 0 && age <= o.Stations[i].StaleAfter:
				st.covered++
			case st.last != 0 && age <= o.Stations[i].StaleAfter+time.Second:
				st.Gaps++
			}
			st.LongestS = max(st.LongestS, int(age/time.Second))
		}
		return nil
	})
	if errors.Is(err, errStopped) || err != nil && steps == 0 {
		return fmt.Errorf("sum a period up: %w", err)
	}
	u.fault(err)
	u.Hours = float64(steps) / 3600
	for _, st := range order {
		if steps > 0 {
			st.Share = finite(float64(st.covered) / float64(steps))
		}
		u.Stations = append(u.Stations, st.Availability)
	}
	return nil
}

func stateOf[T any](at map[string]*T, ids []string, station int) *T {
	if station < 0 || station >= len(ids) {
		return nil
	}
	return at[ids[station]]
}

// rates counts alerts by what they are.
func (u *Summary) rates(lives []Life, o SummaryOptions) {
	by := func(name func(*Life) string, first ...string) []Rate {
		counts := map[string]int{}
		for i := range lives {
			counts[name(&lives[i])]++
		}
		names := slices.Clone(first)
		for _, k := range sortedKeys(counts) {
			if !slices.Contains(names, k) {
				names = append(names, k)
			}
		}
		out := []Rate{}
		for _, n := range names {
			out = append(out, Rate{n, counts[n], u.per100(counts[n])})
		}
		return out
	}
	u.Alerts, u.Per100 = len(lives), u.per100(len(lives))
	u.ByPath = by(func(l *Life) string { return l.Operation + " " + l.Runway })
	u.ByLevel = by(func(l *Life) string { return l.Level }, alerting.Noticeable.String(), alerting.Large.String(), alerting.BeyondMargin.String())
	u.ByKind = by(func(l *Life) string { return l.Kind })
	u.ByCause = by(func(l *Life) string { return l.Cause })
	var hours, months []string
	for h := range 24 {
		hours = append(hours, fmt.Sprintf("%02d", h))
	}
	for t := o.From.Time(); t.Before(o.To.Time()); t = time.Date(t.Year(), t.Month()+1, 1, 0, 0, 0, 0, time.UTC) {
		months = append(months, t.Format("2006-01"))
	}
	u.ByHour = by(func(l *Life) string { return l.Opened.UTC().Format("15") }, hours...)
	u.ByMonth = by(func(l *Life) string { return l.Opened.UTC().Format("2006-01") }, months...)
}

func (u *Summary) per100(n int) *float64 {
	if u.Hours <= 0 {
		return nil
	}
	return finite(100 * float64(n) / u.Hours)
}

// attention is how the occurrences were answered.
func (u *Summary) attention(s *history.Store, lives []Life, o SummaryOptions) {
	opened := map[string]time.Time{}
	for i := range lives { // in order of opening: the first counts
		if _, ok := opened[lives[i].Occurrence]; !ok {
			opened[lives[i].Occurrence] = lives[i].Opened
		}
	}
	u.Occurrences = len(opened)
	first := map[string]float64{} // seconds to the first acknowledgement
	for rec, err := range s.People(o.From, 0, history.KindAcknowledge, history.KindShelve, history.KindNote) {
		if err != nil {
			u.fault(err)
			continue
		}
		switch rec.Kind {
		case history.KindAcknowledge:
			a, err := rec.Acknowledgement()
			u.fault(err)
			if at, ok := opened[a.Occurrence]; ok {
				if _, again := first[a.Occurrence]; !again {
					first[a.Occurrence] = max(0, rec.At.Time().Sub(at).Seconds())
				}
			}
		case history.KindShelve:
			if sh, err := rec.Shelving(); err == nil && !sh.Ended && rec.At < o.To {
				u.Attention.Shelved++
			}
		case history.KindNote:
			if rec.At < o.To {
				u.Attention.Notes++
			}
		}
	}
	u.Attention.Acknowledged = contingency.Share(len(first), len(opened))
	times := make([]float64, 0, len(first))
	for _, v := range first {
		times = append(times, v)
	}
	slices.Sort(times)
	u.Attention.MedianS, u.Attention.NinetiethS = pointOf(times, 0.5), pointOf(times, 0.9)
}

// pointOf is a quantile of sorted values, the lower of two neighbours; nil for
// none.
func pointOf(sorted []float64, p float64) *float64 {
	if len(sorted) == 0 {
		return nil
	}
	return &sorted[int(p*float64(len(sorted)-1)+0.5)]
}

// observed asks what was judged whether a path was observed at a moment. A day
// of which nothing was kept counts as observed, so that a miss is not hidden.
func (u *Summary) observed(o SummaryOptions) func(runway, operation string, at sensors.Instant) bool {
	if o.Directory == "" {
		return nil
	}
	return func(runway, operation string, at sensors.Instant) bool {
		step := at.CeilSecond()
		days, err := judged.Days(o.Directory)
		u.fault(err)
		if !slices.Contains(days, judged.DayOf(step)) {
			return true
		}
		seen := false
		_, err = judged.ReadDay(o.Directory, judged.DayOf(step), step, step+1, func(s *judged.Step) error {
			for i, p := range s.Context.Paths {
				seen = seen || p.Runway == runway && (operation == "" || p.Operation == operation) && s.Complete(i)
			}
			return nil
		})
		u.fault(err)
		return seen
	}
}
