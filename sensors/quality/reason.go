package quality

import "strings"

// Reason is a stable code for what is wrong with a reading.
type Reason string

// The reasons. The first four come from Arrival, the rest from a Checker.
const (
	Retained       Reason = "retained"         // the broker's memory, not a measurement of now
	Exercise       Reason = "exercise"         // marked as synthetic where only real wind is allowed
	Future         Reason = "future"           // its time lies after its arrival
	Late           Reason = "late"             // its step had closed when it arrived
	Range          Reason = "range"            // speed or gust beyond what instruments measure
	Step           Reason = "step"             // the speed jumped
	Stuck          Reason = "stuck"            // speed and direction stand still
	StuckVane      Reason = "stuck-vane"       // the direction stands still while the speed varies
	GustBelowSpeed Reason = "gust-below-speed" // the gust is smaller than the speed
	Spike          Reason = "spike"            // the one or two readings before this one stood out on one side of both their neighbours
	CalmTurning    Reason = "calm-but-turning" // the speed is nothing while the direction goes about
)

// Reasons lists every Reason, so that counters can exist before the first use.
func Reasons() []Reason {
	return []Reason{Retained, Exercise, Future, Late, Range, Step, Stuck, StuckVane, GustBelowSpeed, Spike, CalmTurning}
}

// Flags is the set of what a Checker found.
type Flags uint8

// The flags of a Checker.
const (
	FlagRange Flags = 1 << iota
	FlagStep
	FlagStuck
	FlagStuckVane
	FlagGustBelowSpeed
	FlagSpike
	FlagCalmTurning

	// rejecting is those that make a reading unfit.
	rejecting = FlagRange | FlagStuck | FlagStuckVane
	// noted is those that say something of another reading than their own.
	noted = FlagSpike
)

// Reasons lists the flags that are set.
func (f Flags) Reasons() []Reason {
	var list []Reason
	for i, reason := range [...]Reason{Range, Step, Stuck, StuckVane, GustBelowSpeed, Spike, CalmTurning} {
		if f&(1<<i) != 0 {
			list = append(list, reason)
		}
	}
	return list
}

// String joins the flags with commas; it is empty for none.
func (f Flags) String() string {
	var parts []string
	for _, reason := range f.Reasons() {
		parts = append(parts, string(reason))
	}
	return strings.Join(parts, ",")
}

// Verdict is what a reading is good for.
type Verdict uint8

// The verdicts. The zero Verdict belongs to a Checked that nobody checked.
const (
	Unchecked Verdict = iota
	Accepted          // use it
	Suspect           // use it, and say that it is odd
	Rejected          // do not use it
)

// String is the verdict's word.
func (v Verdict) String() string {
	switch v {
	case Accepted:
		return "accepted"
	case Suspect:
		return "suspect"
	case Rejected:
		return "rejected"
	}
	return "unchecked"
}
