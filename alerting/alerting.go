// Package alerting is what the measured wind means for an aeroplane, and who
// is told: Snapshot (averages) -> windfield -> shear -> hazard -> lifecycle ->
// wording -> history, publish, page. The engine package joins the stages into
// one deterministic object.
//
// This root package holds the vocabulary that the stages share.
package alerting

// Notice is the sentence that ends every page, text, report and export.
const Notice = "Measured at mast height, between masts; the change in flight may be larger. " +
	"No alert does not mean no windshear. Supplementary to certified systems; never a reason to continue. " +
	"Local procedures and licensed practice decide."

// Kind is what an alert is about.
type Kind string

// The kinds of alert.
const (
	HeadwindLoss Kind = "headwind-loss"
	HeadwindGain Kind = "headwind-gain"
	// The others are no change of headwind along a path.
	WindShift     Kind = "wind-shift"     // the wind turns, behind a line or slowly
	VerticalShear Kind = "vertical-shear" // the wind differs with height
	Crosswind     Kind = "crosswind"      // more than the limit set, at the runway end
	Tailwind      Kind = "tailwind"       // the same
)

// Kinds lists the kinds, in the order in which those of one path are told.
func Kinds() []Kind {
	return []Kind{HeadwindLoss, HeadwindGain, WindShift, VerticalShear, Crosswind, Tailwind}
}

// Highest is the highest level that an alert of this kind can have: only a loss
// uses up a margin, and a limit is kept or not.
func (k Kind) Highest() Level {
	switch k {
	case HeadwindLoss:
		return BeyondMargin
	case Crosswind, Tailwind:
		return Noticeable
	}
	return Large
}

// Level is how large the change is. The zero Level is none.
type Level int

// The levels. Each is also shown as "Level N of 3".
const (
	NoLevel Level = iota
	Noticeable
	Large
	BeyondMargin
)

// String is the level's word; "none" for NoLevel.
func (l Level) String() string {
	switch l {
	case NoLevel:
		return "none"
	case Noticeable:
		return "noticeable"
	case Large:
		return "large"
	case BeyondMargin:
		return "beyond-margin"
	}
	return "unknown"
}

// LevelOf is the level with this word; false if there is none.
func LevelOf(word string) (Level, bool) {
	for _, l := range []Level{Noticeable, Large, BeyondMargin} {
		if l.String() == word {
			return l, true
		}
	}
	return NoLevel, false
}

// Cause is what brings a change about.
type Cause string

// The causes.
const (
	Unresolved Cause = "unresolved"
	Outflow    Cause = "outflow"
	GustFront  Cause = "gust-front"
)

// PathState is what can be said of a path as a whole.
type PathState string

// The states of a path. There is no word for "free of shear".
const (
	NotObserved PathState = "not-observed"
	BelowLimits PathState = "below-limits"
	Raised      PathState = "raised"
)

// Condition is what the daemon as a whole can see.
type Condition string

// The conditions. NoContact is never published by a live daemon: it is its
// last will.
const (
	Observing       Condition = "observing"
	PartlyObserving Condition = "partly-observing"
	Blind           Condition = "blind"
	NoContact       Condition = "no-contact"
)
