package page

import (
	"encoding/json"
	"time"

	"sockline/alerting"
	"sockline/sensors"
)

// View is what the daemon knows after one step. It is never changed once it
// is handed over; the next step makes a new one.
type View struct {
	Seq        uint64    // rises with every view of this run
	Made       time.Time // wall time, by the same clock as Options.Now
	At         sensors.Instant
	ValidUntil sensors.Instant
	Condition  alerting.Condition
	Remarks    []string // what else to know of the daemon itself, as sentences
	Exercise   bool
	Airfield   string // its name, where it is no longer that of Options

	Ends        []End
	Paths       []Path
	Alerts      []Alert      // open ones, the worst first
	Occurrences []Occurrence // the largest change first
	Stations    []Station
	RunwayInUse string   // a designator; empty where none is set
	AgeS        *float64 // of the oldest input in use, in s; nil where there is none
	MastsOut    []string // ids of the masts that serve no ground now

	StatusJSON []byte // the status object
	LayoutJSON []byte // runways, paths and masts to scale; nil where there is none
	LayoutID   string // another one with every other layout

	// Ready-made objects of the analysis; empty where there is nothing of the
	// kind, or where nothing looks for it.
	Profiles, Outflows, Fronts, Vertical []json.RawMessage
}

// End is the wind at one runway end.
type End struct {
	Runway   string
	Observed bool
	Sentence string
	JSON     []byte // the end object
}

// Path is one path.
type Path struct {
	Name       string // "landing 07"
	State      alerting.PathState
	Sentence   string
	Unobserved []string // the stretches that are not observed, in words
	JSON       []byte   // the path object
}

// Alert is one open alert.
type Alert struct {
	ID       string
	Kind     alerting.Kind
	Level    alerting.Level
	Observed bool // false: the sentence tells what was last measured
	Sentence string
	JSON     []byte // the alert object
}

// Occurrence is one thing that happens in the weather, with the alerts that it
// raised: what people are told of, hear and acknowledge.
type Occurrence struct {
	ID       string   `json:"id"`
	Sentence string   `json:"sentence"` // of its worst path
	Level    string   `json:"level"`    // a word of alerting.Level
	State    string   `json:"state"`    // raised-unseen, raised-seen, shelved, ended-unseen
	Since    string   `json:"since"`
	Ended    *string  `json:"ended"` // null while an alert of it is open
	Trend    string   `json:"trend"`
	Alerts   []string `json:"alerts"` // ids, the worst first
	Sound    string   `json:"sound"`  // none, first, second

	AcknowledgedBy *string `json:"acknowledged_by"`
	AcknowledgedAt *string `json:"acknowledged_at"`
	ShelvedBy      *string `json:"shelved_by"`
	ShelvedUntil   *string `json:"shelved_until"`
	ShelvedReason  *string `json:"shelved_reason"`
}

// Station is one mast.
type Station struct {
	ID       string
	State    string // one word: live, stale, starting ...
	Live     bool
	Sentence string
	JSON     []byte // the health object
	More     []byte // further members of it, for who asks for the stations
}
