package review

import (
	"math"
	"slices"
	"time"

	"sockline/alerting"
	"sockline/alerting/contingency"
	"sockline/alerting/history"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// How far a report and an alert may lie apart and still be about the same
// wind. A report is written down some time after the crew felt it, and an
// outflow lives for minutes.
const (
	// matchTime: the alert was open at some moment no longer than this before
	// or after the time of the report.
	matchTime = 3 * time.Minute
	// matchPlace: the ground of the alert and that of the report come as near as
	// this, m. A crew tells its place from its height or distance, to half a mile.
	matchPlace = 1000
)

// Felt are the words of what a crew felt.
const (
	FeltLoss = "loss"
	FeltGain = "gain"
	FeltNone = "none"
)

// Verification is what pilots' reports say of the alerts.
type Verification struct {
	Reports     int            `json:"reports"`
	NotObserved int            `json:"reports_not_observed"` // a change was felt where nothing was observed: neither hit nor miss
	Unverified  int            `json:"alerts_unverified"`    // no crew reported: neither right nor false
	Alerts      int            `json:"alerts"`
	ByLevel     []LevelScores  `json:"by_level"`
	ByMonth     []PeriodScores `json:"by_month"` // at the first level
	Amount      Amounts        `json:"amount"`
	Matches     []Match        `json:"matches"`
	Method      string         `json:"method"`
}

// LevelScores are those of one level: a change at least as large, against
// alerts at least as high.
type LevelScores struct {
	Level    string             `json:"level"`
	ChangeKt float64            `json:"change_kt"`
	Table    contingency.Table  `json:"table"`
	Scores   contingency.Scores `json:"scores"`
}

// PeriodScores are those of a month.
type PeriodScores struct {
	Period string             `json:"period"`
	Table  contingency.Table  `json:"table"`
	Scores contingency.Scores `json:"scores"`
}

// Amounts compares what was felt with what was told, where both have a figure.
type Amounts struct {
	N      int      `json:"n"`
	MeanKt *float64 `json:"mean_kt"` // felt less told, magnitudes
	RMSKt  *float64 `json:"rms_kt"`
}

// Match is a report with the alerts it is about.
type Match struct {
	Report   string    `json:"report"`
	At       time.Time `json:"at"`
	Runway   string    `json:"runway"`
	Felt     string    `json:"felt"`
	AmountKt float64   `json:"amount_kt"` // 0: no figure was told
	GoAround bool      `json:"go_around"`
	Alerts   []string  `json:"alerts"`
	Outcome  string    `json:"outcome"` // hit, false-alarm, miss, correct-null, not-observed: at the first level
}

const matchMethod = "A report belongs to an alert of its runway, operation and kind that was open within 3 minutes of it; where the " +
	"report tells a place, the two must come within 1000 m. A change that is felt on ground that is not observed is counted apart. " +
	"An alert that no crew reported on is unverified, which is not false. At each level a felt change counts when it is at least as " +
	"large as the level, one without a figure at the first level only. Intervals are 95 % after Wilson (1927)."

// VerifyOptions are what the verification needs besides reports and alerts.
type VerifyOptions struct {
	Changes [4]float64 // of the levels, m/s, by alerting.Level
	// Observed tells whether the path was observed at a moment; nil: it always
	// was.
	Observed func(runway, operation string, at sensors.Instant) bool
}

// Verify sets reports beside alerts.
func Verify(reports []history.PilotReport, alerts []Life, o VerifyOptions) Verification {
	v := Verification{Reports: len(reports), Alerts: len(alerts), Method: matchMethod, Matches: []Match{}, ByMonth: []PeriodScores{}}
	verified := map[string]bool{}
	months := map[string]*contingency.Table{}
	var tables [4]contingency.Table
	var differences []float64
	for _, r := range reports {
		m := Match{Report: r.ID, At: r.At.Time(), Runway: r.Runway, Felt: r.Felt, AmountKt: tenthKt(r.Amount), GoAround: r.GoAround, Alerts: []string{}}
		highest := alerting.NoLevel
		for i := range alerts {
			l := &alerts[i]
			if !about(&r, l) {
				continue
			}
			verified[l.ID] = true
			m.Alerts = append(m.Alerts, l.ID)
			highest = max(highest, l.highest)
			if r.Amount > 0 && r.Felt != FeltNone {
				differences = append(differences, r.Amount/quantity.Knot-math.Abs(l.PeakKt))
			}
		}
		if highest == alerting.NoLevel && r.Felt != FeltNone && o.Observed != nil && !o.Observed(r.Runway, r.Operation, r.At) {
			v.NotObserved++
			m.Outcome = "not-observed"
			v.Matches = append(v.Matches, m)
			continue
		}
		month := r.At.Time().Format("2006-01")
		if months[month] == nil {
			months[month] = &contingency.Table{}
		}
		for level := alerting.Noticeable; level <= alerting.BeyondMargin; level++ {
			felt, told := feltAtLeast(&r, level, o.Changes[level]), highest >= level
			tables[level].Count(felt, told)
			if level == alerting.Noticeable {
				m.Outcome = outcomeOf(felt, told)
				months[month].Count(felt, told)
			}
		}
		v.Matches = append(v.Matches, m)
	}
	v.Unverified = len(alerts) - len(verified)
	for level := alerting.Noticeable; level <= alerting.BeyondMargin; level++ {
		v.ByLevel = append(v.ByLevel, LevelScores{level.String(), tenthKt(o.Changes[level]), tables[level], tables[level].Scores()})
	}
	for _, month := range sortedKeys(months) {
		v.ByMonth = append(v.ByMonth, PeriodScores{month, *months[month], months[month].Scores()})
	}
	v.Amount = amountsOf(differences)
	return v
}

// outcomeOf names what became of one report.
func outcomeOf(felt, told bool) string {
	switch {
	case felt && told:
		return "hit"
	case felt:
		return "miss"
	case told:
		return "false-alarm"
	}
	return "correct-null"
}

// feltAtLeast tells whether a crew felt a change as large as a level.
func feltAtLeast(r *history.PilotReport, level alerting.Level, change float64) bool {
	switch {
	case r.Felt == FeltNone:
		return false
	case r.Amount == 0:
		return level == alerting.Noticeable
	}
	// A crew tells whole knots: 10 kt is meant where 10 kt is said.
	return r.Amount >= change-quantity.Knot/2
}

// about tells whether a report and an alert are about the same wind.
func about(r *history.PilotReport, l *Life) bool {
	at := r.At.Time()
	switch {
	case r.Event != "" && r.Event == l.ID:
		return true // whoever wrote it down said so
	case r.Runway != l.Runway, r.Operation != "" && r.Operation != l.Operation:
		return false
	case r.Felt == FeltLoss && l.Kind != string(alerting.HeadwindLoss), r.Felt == FeltGain && l.Kind != string(alerting.HeadwindGain):
		return false
	case l.Kind != string(alerting.HeadwindLoss) && l.Kind != string(alerting.HeadwindGain):
		return false
	case at.Before(l.Opened.Add(-matchTime)), at.After(l.end().Add(matchTime)):
		return false
	case r.FromM == nil && r.ToM == nil:
		return true
	}
	from, to := r.FromM, r.ToM
	if from == nil {
		from = to
	}
	if to == nil {
		to = from
	}
	return max(*from, *to)+matchPlace >= min(l.FromM, l.ToM) && min(*from, *to)-matchPlace <= max(l.FromM, l.ToM)
}

func amountsOf(differences []float64) Amounts {
	a := Amounts{N: len(differences)}
	if a.N == 0 {
		return a
	}
	sum, squares := 0.0, 0.0
	for _, d := range differences {
		sum += d
		squares += d * d
	}
	mean, rms := sum/float64(a.N), math.Sqrt(squares/float64(a.N))
	a.MeanKt, a.RMSKt = &mean, &rms
	return a
}

func tenthKt(ms float64) float64 { return math.Round(ms/quantity.Knot*10) / 10 }

func sortedKeys[V any](m map[string]V) []string {
	keys := make([]string, 0, len(m))
	for k := range m {
		keys = append(keys, k)
	}
	slices.Sort(keys)
	return keys
}

// PilotReports are those of a history in [from, to); what cannot be read is
// named in the error, the others are still returned.
func PilotReports(s *history.Store, from, to sensors.Instant) ([]history.PilotReport, error) {
	var out []history.PilotReport
	var first error
	// A report may be written down days after the flight.
	for rec, err := range s.People(from, 0, history.KindPilotReport) {
		var r history.PilotReport
		if err == nil {
			r, err = rec.PilotReport()
		}
		if err != nil {
			if first == nil {
				first = err
			}
			continue
		}
		if r.At >= from && (to == 0 || r.At < to) {
			out = append(out, r)
		}
	}
	return out, first
}
