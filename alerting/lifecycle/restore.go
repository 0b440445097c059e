package lifecycle

import (
	"slices"

	"sockline/alerting"
	"sockline/sensors"
)

// Restore puts the alerts that were open as of asOf, each as last issued, in
// the place of whatever the machine holds (what it opened while the stages
// before it were warmed up was never told to anyone), and appends to dst the
// closings of those that cannot go on: last issued more than 10 min before asOf
// (expired-while-down), or on a path that is no longer configured
// (path-withdrawn).
//
// An alert issued no more than 5 s before asOf was not interrupted. To go on
// exactly as it would have, it needs the steps since its last issue: so a
// replay restores before the step asOf - 5 s. The steps up to asOf then bring
// each alert up to date from its own last issue on, and issue nothing. After a
// longer gap the hold counts from asOf and the trend begins anew, since what
// happened in between was not seen.
func (m *Machine) Restore(alerts []Alert, asOf sensors.Instant, dst []Transition) []Transition {
	clear(m.slots)
	m.recent, m.asOf = nil, asOf
	for _, a := range alerts {
		s, because := m.home(&a, asOf)
		if s == nil {
			dst = append(dst, closing(asOf, a, because))
			continue
		}
		if asOf.Sub(a.Updated) > issueEvery {
			a.Memory.Trend = TrendMemory{}
			for l := alerting.Noticeable; l <= a.Level; l++ {
				a.Memory.Held[l] = asOf
			}
		}
		m.settle(s, a, a)
	}
	return dst
}

// home is the free slot of an alert to be restored, or why there is none.
func (m *Machine) home(a *Alert, asOf sensors.Instant) (*slot, CloseReason) {
	path := m.pathOf(a)
	kind := slices.Index(kinds[:], a.Kind)
	a.Path = path
	switch {
	case asOf.Sub(a.Updated) > unobservedLimit:
		return nil, ExpiredWhileDown
	case path < 0 || kind < 0:
		return nil, PathWithdrawn
	}
	s := &m.slots[path*len(kinds)+kind]
	if s.open { // two for one path and kind: only damage can do that
		return nil, ExpiredWhileDown
	}
	return s, ""
}

func (m *Machine) pathOf(a *Alert) int {
	return slices.IndexFunc(m.settings.Paths, func(p PathName) bool {
		return p.Runway == a.Runway && p.Operation == a.Operation
	})
}

// settle puts an open alert into a slot.
func (m *Machine) settle(s *slot, alert, issued Alert) {
	used, missing := m.indices(issued.Used), m.indices(issued.Missing)
	*s = slot{
		open: true, alert: alert, issued: issued,
		used: used, missing: missing,
		issuedUsed: slices.Clone(used), issuedMissing: slices.Clone(missing),
	}
}

// Rebase puts other settings in force after the step T. Open alerts keep their
// id and are judged under the new settings from the next step on; those on a
// path that is gone are closed as path-withdrawn, appended to dst.
func (m *Machine) Rebase(settings Settings, T sensors.Instant, dst []Transition) []Transition {
	next := New(settings)
	next.last, next.asOf, next.recent = m.last, m.asOf, m.recent
	for i := range m.slots {
		s := &m.slots[i]
		if !s.open {
			continue
		}
		path := next.pathOf(&s.alert)
		s.alert.Path, s.issued.Path = path, path
		if path < 0 {
			dst = append(dst, closing(T, s.alert, PathWithdrawn))
			continue
		}
		next.settle(&next.slots[path*len(kinds)+i%len(kinds)], s.alert, s.issued)
	}
	*m = *next
	return dst
}

// Settings is a copy of the settings in force.
func (m *Machine) Settings() Settings {
	s := m.settings
	s.Paths, s.StationIDs = slices.Clone(s.Paths), slices.Clone(s.StationIDs)
	return s
}
