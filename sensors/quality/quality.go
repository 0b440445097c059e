// Package quality takes readings and says of each whether it may be used:
// accepted, suspect or rejected, and why. It deletes nothing, and it never
// rejects a wind for being sudden, because a microburst is. What stands out for
// one or two readings and is gone again is a spike, and no wind.
//
// There are two parts. Arrival needs no memory: it looks at the stamps and
// marks of one reading. A Checker holds the little memory of one station and
// is fed in the order of Less; nothing older than ten minutes decides, so that
// a replay that starts a while earlier comes to the same verdicts.
//
// A Checked can only be made here, so that what follows cannot be fed with
// readings that nobody looked at. It goes to package averages.
package quality

import (
	"cmp"
	"time"

	"sockline/sensors"
)

// Checked is a reading with its verdict.
type Checked struct {
	reading sensors.Reading
	verdict Verdict
	flags   Flags
	waits   bool
}

// Reading is the reading as it was decoded.
func (c Checked) Reading() sensors.Reading { return c.reading }

// Verdict is what the reading is good for.
func (c Checked) Verdict() Verdict { return c.verdict }

// Flags is everything that was found, also where it did not decide.
func (c Checked) Flags() Flags { return c.flags }

// Spikes reports whether the readings before this one that wait were spikes.
// They are to be left out; without it, they were wind.
func (c Checked) Spikes() bool { return c.flags&FlagSpike != 0 }

// Waits reports whether the reading stands out so far that what it is worth
// shows with the next one that does not wait: one or two readings on.
func (c Checked) Waits() bool { return c.waits }

// Usable reports whether the reading may enter an average.
func (c Checked) Usable() bool { return c.verdict == Accepted || c.verdict == Suspect }

// Arrival judges a reading by its stamps and marks alone. ok is false if it
// must not be evaluated, for the reason given; it may still be stored.
//
// A retained reading is the broker's memory of an instrument that may long be
// dead. Step T uses what was measured in (T-1 s, T] and arrived by T +
// lateness; what arrives later is late. A clock that runs ahead by more than
// the lateness makes a reading future. exerciseAllowed says whether readings
// that are marked as synthetic are welcome.
func Arrival(r sensors.Reading, lateness time.Duration, exerciseAllowed bool) (reason Reason, ok bool) {
	switch {
	case r.Retained:
		return Retained, false
	case r.Exercise && !exerciseAllowed:
		return Exercise, false
	case r.Time > r.Arrival.Add(lateness):
		return Future, false
	case r.Arrival > r.Time.CeilSecond().Add(lateness):
		return Late, false
	}
	return "", true
}

// Less orders readings by event time, then station, then content. Copies of
// one measurement come to stand together, the first to arrive foremost.
func Less(a, b sensors.Reading) bool { return compare(a, b) < 0 }

// Same reports whether a and b are copies of one measurement: equal in time,
// station and content, whenever and however they arrived.
func Same(a, b sensors.Reading) bool { return measurement(a, b) == 0 }

func compare(a, b sensors.Reading) int {
	return cmp.Or(
		measurement(a, b),
		cmp.Compare(a.Arrival, b.Arrival),
		boolean(a.Retained, b.Retained),
	)
}

// measurement compares what was measured, without how it arrived.
func measurement(a, b sensors.Reading) int {
	if c := cmp.Or(cmp.Compare(a.Time, b.Time), cmp.Compare(a.Station, b.Station)); c != 0 {
		return c // nearly always
	}
	c := cmp.Or(
		cmp.Compare(a.Speed, b.Speed),
		cmp.Compare(a.From, b.From),
		boolean(a.HasGust, b.HasGust),
		boolean(a.Exercise, b.Exercise),
	)
	if c == 0 && a.HasGust { // without one the field means nothing
		c = cmp.Compare(a.Gust, b.Gust)
	}
	return c
}

// boolean orders false before true.
func boolean(a, b bool) int {
	switch {
	case a == b:
		return 0
	case b:
		return -1
	}
	return 1
}
