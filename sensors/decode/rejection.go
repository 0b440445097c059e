package decode

import (
	"fmt"
	"strings"
)

// Reason is a stable code for why (part of) a payload gave no reading.
type Reason string

// The reasons.
const (
	TooLarge      Reason = "too-large"      // over MaxPayload bytes or MaxReadings, or nested deeper than MaxDepth
	Malformed     Reason = "malformed"      // not what the format says
	Checksum      Reason = "checksum"       // an NMEA checksum that is missing or wrong
	NotUnderstood Reason = "not-understood" // the payload demands more than is known here
	Units         Reason = "units"          // a unit that is missing or not one of the quantity
	Incomplete    Reason = "incomplete"     // a speed without a direction, or the reverse
	Contradiction Reason = "contradiction"  // two values for one thing that differ
	NotFinite     Reason = "not-finite"     // NaN, infinite, or too large for a float64
	Impossible    Reason = "impossible"     // a speed below 0 or a direction beyond a circle
	BadTime       Reason = "bad-time"       // a time that cannot be read
	NotValid      Reason = "not-valid"      // the instrument itself says that its value is not valid
	NoValue       Reason = "no-value"       // the place of the value is empty

	ForeignStation Reason = "foreign-station" // the payload names another station than its topic
	Flood          Reason = "flood"           // more messages or readings than a station may send
)

// Reasons lists every Reason, so that counters can exist before the first use.
func Reasons() []Reason {
	return []Reason{TooLarge, Malformed, Checksum, NotUnderstood, Units, Incomplete,
		Contradiction, NotFinite, Impossible, BadTime, NotValid, NoValue, ForeignStation, Flood}
}

// Refused tells a payload that was refused from one that was in order but held
// no wind (NotValid and NoValue): an instrument that says that it has nothing
// to say is working.
func (r Reason) Refused() bool { return r != NotValid && r != NoValue }

// Rejection is one reason why parts of a payload gave no reading.
type Rejection struct {
	Reason Reason
	Detail string // of the first part: where, what, and what was expected
	Count  int    // how many parts were refused for this reason
}

// Error is the reason and the detail.
func (r *Rejection) Error() string {
	if r.Count > 1 {
		return fmt.Sprintf("%s: %s (and %d more)", r.Reason, r.Detail, r.Count-1)
	}
	return fmt.Sprintf("%s: %s", r.Reason, r.Detail)
}

// Rejections is everything that was refused in one payload: at most one entry
// a reason, in the order of first appearance, however long the payload.
type Rejections []*Rejection

// Error joins the entries.
func (r Rejections) Error() string {
	parts := make([]string, len(r))
	for i, one := range r {
		parts[i] = one.Error()
	}
	return strings.Join(parts, "; ")
}

// Unwrap lets errors.As find a *Rejection.
func (r Rejections) Unwrap() []error {
	list := make([]error, len(r))
	for i, one := range r {
		list[i] = one
	}
	return list
}

// Refused reports whether any part was refused, and not merely empty.
func (r Rejections) Refused() bool {
	for _, one := range r {
		if one.Reason.Refused() {
			return true
		}
	}
	return false
}

// refuse records that a part of the payload at hand gave no reading.
func (d *Decoder) refuse(reason Reason, format string, args ...any) {
	for _, one := range d.faults {
		if one.Reason == reason {
			one.Count++
			return
		}
	}
	d.faults = append(d.faults, &Rejection{Reason: reason, Detail: fmt.Sprintf(format, args...), Count: 1})
}

// excerpt quotes the beginning of payload text for a Detail: control
// characters escaped, short enough for a log line.
func excerpt(b []byte) string {
	const most = 48
	if len(b) > most {
		return fmt.Sprintf("%q...", b[:most])
	}
	return fmt.Sprintf("%q", b)
}
