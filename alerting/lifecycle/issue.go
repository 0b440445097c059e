package lifecycle

import (
	"fmt"
	"slices"
	"time"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// worthTelling is why the alert must be issued at T, in a plain clause; empty
// if it need not be. The order is that of weight: the first that holds is
// what the log says.
func (s *slot) worthTelling(T sensors.Instant) string {
	a, was := &s.alert, &s.issued
	moved := magnitude(a.Change - was.Change)
	shifted := max(magnitude(a.From-was.From), magnitude(a.To-was.To))
	switch {
	case a.Level > was.Level:
		return fmt.Sprintf("level %s met with probability %.2f", a.Level, a.Probability)
	case a.Level < was.Level:
		return fmt.Sprintf("level %s not met during the hold", was.Level)
	case a.Observed != was.Observed && !a.Observed:
		return "its ground is no longer observed"
	case a.Observed != was.Observed:
		return "its ground is observed again"
	case a.AtEdge != was.AtEdge && a.AtEdge:
		return "reaches the end of the observed ground"
	case a.AtEdge != was.AtEdge:
		return "ends within the observed ground"
	case !slices.Equal(s.missing, s.issuedMissing):
		return "other stations are missing"
	case a.Trend != was.Trend:
		return "trend " + string(a.Trend)
	case a.Cause != was.Cause:
		return "cause " + string(a.Cause)
	case moved >= issueChange:
		return fmt.Sprintf("changed by %.1f kt", moved/quantity.Knot)
	case shifted >= issuePlace:
		return fmt.Sprintf("moved by %.0f m", shifted)
	case T.Sub(was.Updated) >= issueEvery:
		return fmt.Sprintf("%d s after the last issue", T.Sub(was.Updated)/time.Second)
	}
	return ""
}

// issue appends the alert as it stands at T as its next revision.
func (m *Machine) issue(T sensors.Instant, s *slot, why string, dst []Transition) []Transition {
	a := &s.alert
	from := s.issued.Level // none at opening
	a.Revision++
	a.Updated = T
	// The lists of an issued alert belong to whoever was given it: new ones
	// are made only when they differ.
	if a.Used == nil || !slices.Equal(s.used, s.issuedUsed) {
		a.Used = m.stations(s.used)
		s.issuedUsed = append(s.issuedUsed[:0], s.used...)
	}
	if a.Missing == nil || !slices.Equal(s.missing, s.issuedMissing) {
		a.Missing = m.stations(s.missing)
		s.issuedMissing = append(s.issuedMissing[:0], s.missing...)
	}
	s.issued = *a
	return append(dst, Transition{At: T, Alert: *a, From: from, Why: why})
}

// end closes the alert and frees its slot.
func (m *Machine) end(T sensors.Instant, s *slot, because CloseReason, dst []Transition) []Transition {
	m.remember(T, &s.alert)
	s.alert.close(T, because)
	dst = m.issue(T, s, "closed: "+string(because), dst)
	s.open = false
	s.alert, s.issued = Alert{}, Alert{}
	return dst
}

func (a *Alert) close(T sensors.Instant, because CloseReason) {
	a.State, a.Closed, a.Because = Closed, T, because
	a.Trend = TrendUnknown
}

// closing is the transition that closes an alert without a slot.
func closing(T sensors.Instant, a Alert, because CloseReason) Transition {
	a.close(T, because)
	a.Revision++
	a.Updated = T
	return Transition{At: T, Alert: a, From: a.Level, Why: "closed: " + string(because)}
}

// stations are the ids of these stations; never nil.
func (m *Machine) stations(indices []int) []string {
	ids := make([]string, 0, len(indices))
	for _, i := range indices {
		if i >= 0 && i < len(m.settings.StationIDs) {
			ids = append(ids, m.settings.StationIDs[i])
		}
	}
	return ids
}

// indices are the stations with these ids, as far as they are configured.
func (m *Machine) indices(ids []string) []int {
	var found []int
	for _, id := range ids {
		if i := slices.Index(m.settings.StationIDs, id); i >= 0 {
			found = append(found, i)
		}
	}
	return found
}
