package wording

import (
	"strconv"
	"strings"

	"sockline/alerting"
	"sockline/sensors"
)

// EmbeddedBroker is the remark of a daemon that brings its own broker.
const EmbeddedBroker = "The broker is built in: nobody is told when this program stops."

// Status is the daemon as a whole at one step, ready to be told.
type Status struct {
	Airfield       string
	Instance       string // this run of the daemon
	Version        string
	Condition      alerting.Condition
	At, ValidUntil sensors.Instant
	Live, Total    int      // masts
	Connected      bool     // to the broker of the readings
	Subscribed     bool     // and every topic of the masts is granted
	ClockOffset    float64  // of the host clock from the arrival clock, s
	Degraded       string   // why the history may miss things; empty while it is whole
	DayHead        DayHead  // of the journal; zero before the first day has ended
	Remarks        []string // whole sentences
	Exercise       bool
}

// DayHead is where the journal of the history stood at the end of a UTC day:
// with a copy of it, kept elsewhere, later editing shows.
type DayHead struct {
	Day     string // 2006-01-02
	Records uint64
	SHA256  string // hash of the last of them, hexadecimal
}

// JSON is the status object of the outside face.
func (s *Status) JSON() []byte {
	var masts, broker, history, o object
	masts.count("live", s.Live)
	masts.count("total", s.Total)
	broker.flag("connected", s.Connected)
	broker.flag("subscribed", s.Subscribed)
	history.flag("degraded", s.Degraded != "")
	history.text("reason", s.Degraded)
	if s.DayHead.Day != "" {
		var head object
		head.text("day", s.DayHead.Day)
		head.count("records", int(s.DayHead.Records))
		head.text("sha256", s.DayHead.SHA256)
		history.raw("day_head", head.end())
	}
	o.text("condition", string(s.Condition))
	o.text("instance", s.Instance)
	o.text("airfield", s.Airfield)
	o.time("at", s.At)
	o.time("valid_until", s.ValidUntil)
	o.raw("stations", masts.end())
	o.raw("broker", broker.end())
	o.fixed("clock_offset_s", s.ClockOffset, 1)
	o.raw("history", history.end())
	o.list("remarks", s.Remarks)
	o.text("version", s.Version)
	o.flag("exercise", s.Exercise)
	o.text("notice", alerting.Notice)
	return o.end()
}

// Text is the status as sentences.
func (s *Status) Text() string {
	var b strings.Builder
	if s.Exercise {
		b.WriteString(exercisePrefix)
	}
	b.WriteString(conditionWords(s.Condition))
	if s.Condition != alerting.NoContact {
		b.WriteString(" " + strconv.Itoa(s.Live) + " of " + strconv.Itoa(s.Total) + " masts report.")
	}
	if s.Degraded != "" {
		b.WriteString(" The history may miss what is told now: " + strings.TrimSuffix(s.Degraded, ".") + ".")
	}
	for _, r := range s.Remarks {
		b.WriteString(" " + r)
	}
	return b.String()
}

func conditionWords(c alerting.Condition) string {
	switch c {
	case alerting.Observing:
		return "Observing: the ground that matters is observed on every path."
	case alerting.PartlyObserving:
		return "Partly observing: ground that matters is not observed on some paths."
	case alerting.Blind:
		return "Blind: no path is observed."
	}
	return "No contact: nothing is known of the wind."
}
