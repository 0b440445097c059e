// Package lifecycle turns Assessments over time into alerts that open, change
// and close: hysteresis and hold on the off side only, occurrences, what
// happens when the ground is no longer observed. Next: wording.
package lifecycle

import (
	"sockline/alerting"
	"sockline/alerting/hazard"
	"sockline/sensors"
)

// State of an alert.
type State string

// The states of an alert.
const (
	Open   State = "open"
	Closed State = "closed"
)

// CloseReason says why an alert closed.
type CloseReason string

// The reasons for closing.
const (
	BelowLevel       CloseReason = "below-level"
	NotObserved      CloseReason = "not-observed"
	PathWithdrawn    CloseReason = "path-withdrawn"
	ExpiredWhileDown CloseReason = "expired-while-down"
)

// Trend of the change.
type Trend string

// The trends.
const (
	Growing      Trend = "growing"
	Steady       Trend = "steady"
	Fading       Trend = "fading"
	TrendUnknown Trend = "unknown"
)

// Alert is one alert from opening to closing, as it stands at Updated. Speeds
// in m/s (signed: a loss is negative), distances in metres before the
// threshold of its path.
type Alert struct {
	ID         string
	Occurrence string
	Revision   int
	Path       int // index into the airfield's paths; -1 once the path is withdrawn
	Runway     string
	Operation  string
	Kind       alerting.Kind
	Level      alerting.Level
	State      State
	Opened     sensors.Instant
	Updated    sensors.Instant
	Closed     sensors.Instant // 0 while open
	Because    CloseReason     // empty while open

	Change, ChangeLow, ChangeHigh float64 // m/s, signed, Low <= Change <= High: for a loss Low is minus the 95 % point of M
	Probability                   float64 // P(M >= the change of Level)
	From, To                      float64 // m before the threshold
	AtEdge                        bool
	Observed                      bool
	MeasuredAt                    sensors.Instant // when Change was last measured (older than Updated while not observed)
	MaxSlope, MeanSlope           float64         // 1/s, magnitudes
	FBar                          float64
	FBarVertical                  float64 // estimated, not measured; see hazard.Change
	Cause                         alerting.Cause
	Detail                        hazard.Detail `json:",omitzero"` // of the kinds besides loss and gain
	Trend                         Trend
	PeakChange                    float64 // m/s, signed
	PeakAt                        sensors.Instant
	Used, Missing                 []string // station ids, in configured order
	// Fewer is what the change would be without one of the masts, by station, of
	// the last two minutes: how far the alert hangs on a single one.
	Fewer    []Fewer
	Exercise bool
	Memory   Memory // what the judging of later steps needs besides the above
}

// Fewer is the change without one mast.
type Fewer struct {
	Station string
	At      sensors.Instant
	Change  float64 // m/s, signed like Alert.Change
}

// Memory is the part of an alert's state that no surface shows. It is kept in
// the history with the alert, so that an alert read back goes on exactly as it
// would have gone on without the interruption.
type Memory struct {
	// Held is, by level, the last step at which the level was met under the
	// hysteresis, or at which its ground could not be seen: the hold counts
	// from there.
	Held  [4]sensors.Instant
	Trend TrendMemory
}

// Transition is one issue of an alert: at opening, at a change worth telling,
// every 5 s, and at closing.
type Transition struct {
	At    sensors.Instant
	Alert Alert
	From  alerting.Level // the level before; NoLevel at opening
	Why   string         // one plain clause for the log
}
