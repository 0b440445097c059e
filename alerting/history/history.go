// Package history keeps what was measured and decided: the readings of every
// step and the issues of every alert come in, a hash-chained journal and one
// file of readings a UTC day go to disk, and each issue goes out again at the
// release, marked as recorded or not.
//
// A Store is the directory and answers questions about the past; its Writer
// is the only thing that adds to it. The Writer never makes its caller wait:
// a disk that fails, fills or stalls shows in Health and delays an issue by
// at most ReleaseWait.
//
// The package reads no clock. It waits by means of an injected timer, because
// the release rule is about the time that passes in front of a reader of the
// alert, not about event time; no stored value depends on it.
//
// The files are described byte by byte in format.md. Next: publish, page.
package history

import (
	"time"

	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

// ReleaseWait is how long an issue waits for the disk before it goes out
// marked as not recorded.
const ReleaseWait = 200 * time.Millisecond

// CommitEvery is the shortest time between two commits that hold readings
// only: of readings at most the last second is lost with the power.
const CommitEvery = time.Second

// LateReading is a reading that no step evaluated, with the reason: it came
// too late, was rejected, or repeats another.
type LateReading struct {
	Reading sensors.Reading
	Reason  string
}

// Issue is one issue of an alert.
type Issue struct {
	Alert  lifecycle.Alert // the alert as it stood, for a restart and a replay
	Object []byte          // the alert object as issued, JSON; not changed after Submit
}

// Batch is what one step leaves behind. Submitting a step again replaces its
// readings.
type Batch struct {
	Step     sensors.Instant   // the step T, a whole second
	Stations []string          // the ids that Reading.Station counts
	Readings []sensors.Reading // what the step evaluated, in its order
	Late     []LateReading     // what was turned away since the step before
	Entries  []Entry           // inputs that take effect with this step (a configuration, a table)
	Issues   []Issue           // what the step decided
}

// Released is an issue on its way out. Recorded is true when it is on disk,
// together with every reading up to its step that no gap in the journal names.
type Released struct {
	Step     sensors.Instant
	Issue    Issue
	Recorded bool
}

// Step is one stored step as it is read back. Station indices count Stations.
type Step struct {
	At       sensors.Instant
	Stations []string
	Readings []sensors.Reading
	Late     []LateReading
}

// For returns the evaluated readings with the station indices of ids instead
// of those of the step, and leaves out the stations that ids does not have.
// The result may share memory with the step.
func (s Step) For(ids []string) []sensors.Reading {
	if equalStrings(s.Stations, ids) {
		return s.Readings
	}
	index := make(map[string]int, len(ids))
	for i, id := range ids {
		index[id] = i
	}
	out := make([]sensors.Reading, 0, len(s.Readings))
	for _, r := range s.Readings {
		if r.Station < 0 || r.Station >= len(s.Stations) {
			continue
		}
		if i, ok := index[s.Stations[r.Station]]; ok {
			r.Station = i
			out = append(out, r)
		}
	}
	return out
}

func equalStrings(a, b []string) bool {
	if len(a) != len(b) {
		return false
	}
	for i := range a {
		if a[i] != b[i] {
			return false
		}
	}
	return true
}

// Health is the state of the history at one moment. It is a value: the Store
// makes a new one at each change.
type Health struct {
	Degraded bool   // what is decided now may not be on disk
	Reason   string // why, and the mend; empty when not degraded

	LastStep sensors.Instant // the newest step on disk; 0 if none
	Commits  uint64          // rounds of writing that succeeded
	Failed   uint64          // and that did not
	Steps    uint64          // steps, readings and journal records written since the start
	Readings uint64
	Records  uint64

	Unrecorded      uint64 // issues released without being on disk
	StepsDropped    uint64 // whole steps of readings given up because the queue was full
	ReadingsDropped uint64
	RecordsDropped  uint64 // journal records given up because the queue was full
	WaitingSteps    int    // in memory, not yet on disk
	WaitingRecords  int

	DayHead Head // where the journal stood at the end of the last day that has ended; zero before

	// Of the disk, where Options.Space tells.
	Space           Space
	SpaceLow        string // why, and the mend, when little of it is free
	ReadingsStopped bool   // so little that readings are given up, to keep room for events
	Reserve         uint64 // bytes kept for events when the disk is full

	KeptBack string // why old readings are not deleted although their time is over; empty if they are

	Damage []string // what was found damaged, and what was done about it
}
