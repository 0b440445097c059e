package main

import (
	"encoding/json"
	"fmt"
	"math"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/alerting/drift"
	"sockline/alerting/engine"
	"sockline/alerting/wording"
	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quality"
)

// stationHealth is what is told of a mast, under the topic of its health and
// in the list of stations.
type stationHealth struct {
	ID          string             `json:"id"`
	State       string             `json:"state"` // live, late, stale, lost, starting, never-seen, under-maintenance
	Live        bool               `json:"live"`  // it serves ground
	Last        *string            `json:"last"`  // event time of its newest reading; null if none
	AgeS        *float64           `json:"age_s"` // of that reading
	Messages    uint64             `json:"messages"`
	Readings    uint64             `json:"readings"`
	Suspect     uint64             `json:"suspect"`
	Rejected    uint64             `json:"rejected"`
	Problem     string             `json:"problem"` // what was last wrong with a payload
	Wind        *windObject        `json:"wind"`    // null until there are two minutes
	Clock       clockObject        `json:"clock"`
	Neighbours  neighbourObject    `json:"neighbours"`
	Maintenance *maintenanceObject `json:"maintenance"` // the one it is under; null if none
	Book        bookObject         `json:"book"`
	Findings    []string           `json:"findings"` // what a technician should know, as sentences
	At          string             `json:"at"`
	ValidUntil  string             `json:"valid_until"`
	Exercise    bool               `json:"exercise"`
	Notice      string             `json:"notice"`

	stroke averages.Stroke // of its instrument, if it is recent
}

// clockObject is what is known of the clock of a mast.
type clockObject struct {
	AheadS     *float64 `json:"ahead_s"` // null until it is known
	Off        bool     `json:"off"`
	CorrectedS float64  `json:"corrected_s"` // taken off its times
}

// neighbourObject is how a mast compares with its neighbours, with intervals
// of 95 %; the numbers are null until they rest on half a day of wind.
type neighbourObject struct {
	Hours      int         `json:"hours"`
	TurnedDeg  *[3]float64 `json:"turned_deg"`  // low, middle, high; clockwise
	SpeedRatio *[3]float64 `json:"speed_ratio"` // low, middle, high
	Named      []string    `json:"named"`       // turned, reads-low, reads-high, blocked
	Doubt      float64     `json:"doubt"`       // probability that it is wrong at this step, by what they read
}

// maintenanceObject is one maintenance.
type maintenanceObject struct {
	From   string `json:"from"`
	To     string `json:"to"`
	Reason string `json:"reason"`
}

// bookObject is what the configuration says of the instrument.
type bookObject struct {
	Model      string `json:"model"`
	Serial     string `json:"serial"`
	Installed  string `json:"installed"`
	Calibrated string `json:"calibrated"`
	NextDue    string `json:"next_due"`
	Overdue    bool   `json:"overdue"`
	Notes      string `json:"notes"`
}

// bookOf is the book of a station on the UTC day of an instant.
func bookOf(b sensors.Book, at sensors.Instant) bookObject {
	return bookObject{b.Model, b.Serial, b.Installed, b.Calibrated, b.NextDue,
		b.NextDue != "" && b.NextDue < at.Time().Format(time.DateOnly), b.Notes}
}

// stateWord is the code of a mast's state.
func stateWord(m *averages.Mast) string {
	if m.Late {
		return "late"
	}
	return m.State.String()
}

// stateWords is the same within a sentence.
func stateWords(word string) string {
	switch word {
	case averages.Never.String():
		return "not heard of yet"
	case averages.Maintenance.String():
		return "under maintenance"
	}
	return word
}

// station is what is told of a mast at a step.
func (r *reporter) station(i int, e *engine.Engine, res *engine.Result) stationHealth {
	m, c, st := res.Snapshot.Mast(i), e.Counts(), &r.cfg.Stations[i]
	h := stationHealth{
		ID: st.ID, State: stateWord(m), Live: m.State == averages.Live,
		Messages: c.Messages[i], Readings: c.Accepted[i], Suspect: c.Suspect[i], Rejected: rejections(c, i), Problem: c.LastWhy[i],
		Wind: r.wind(i, e, res.At), Clock: clockOf(e.Clock(i)), Neighbours: neighboursOf(e.Neighbours(i)), Book: bookOf(st.Book, res.At),
		At: seconds(res.At), ValidUntil: seconds(res.At.Add(validFor)),
		Exercise: r.exercise || m.Exercise, Notice: alerting.Notice,
	}
	if m.Last != 0 {
		last, age := m.Last.String(), res.At.Sub(m.Last).Seconds()
		h.Last, h.AgeS = &last, &age
	}
	if work, under := st.UnderMaintenance(res.At); under {
		h.Maintenance = &maintenanceObject{seconds(work.From), seconds(work.To), work.Reason}
	}
	if res.Doubt != nil {
		h.Neighbours.Doubt = decimals(res.Doubt[i], 2)
	}
	if res.At.Sub(m.Stroke.At) < strokeTold {
		h.stroke = m.Stroke
	}
	h.Findings = findings(&h)
	return h
}

// wind is the newest wind that was worked out of a mast.
func (r *reporter) wind(i int, e *engine.Engine, at sensors.Instant) *windObject {
	if r.winds == nil {
		r.winds = make([]*windObject, len(r.cfg.Stations))
	}
	if (int64(at/sensors.Second)+int64(i))%windTurns == 0 {
		r.winds[i] = nil
		if w, ok := e.Wind(i); ok {
			r.winds[i] = windOf(&w, &r.cfg.Stations[i])
		}
	}
	return r.winds[i]
}

func clockOf(s quality.Skew) clockObject {
	o := clockObject{Off: s.Off, CorrectedS: s.Applied.Seconds()}
	if s.Known {
		o.AheadS = pointer(decimals(s.Ahead.Seconds(), 2))
	}
	return o
}

func neighboursOf(f drift.Finding) neighbourObject {
	o := neighbourObject{Hours: f.Hours, Named: []string{}}
	if f.Known {
		o.TurnedDeg = &[3]float64{decimals(f.TurnedLow, 1), decimals(f.Turned, 1), decimals(f.TurnedHigh, 1)}
		o.SpeedRatio = &[3]float64{decimals(f.RatioLow, 3), decimals(f.Ratio, 3), decimals(f.RatioHigh, 3)}
	}
	for _, n := range []struct {
		is   bool
		word string
	}{{f.Misaligned, "turned"}, {f.Low, "reads-low"}, {f.High, "reads-high"}, {f.Blocked, "blocked"}} {
		if n.is {
			o.Named = append(o.Named, n.word)
		}
	}
	return o
}

// doubted is the probability of being wrong from which on it is told.
const doubted = 0.5

// strokeTold is how long a stroke of an instrument is told of.
const strokeTold = time.Hour

// strokeWords tells of a stroke that the neighbours did not follow; empty where there
// was none.
func strokeWords(s averages.Stroke) string {
	switch {
	case s.At == 0:
		return ""
	case s.Turn != 0:
		side := "clockwise"
		if s.Turn > 0 { // from east to north
			side = "anticlockwise"
		}
		return fmt.Sprintf("Within a second or two, at %s, its direction turned %s by about %.0f degrees, as a vane does that slips: look at its clamp.",
			seconds(s.At), side, math.Abs(s.Turn)*180/math.Pi)
	}
	return fmt.Sprintf("Within a second or two, at %s, its speed fell to about %.0f %%, as of cups that are damaged or held: look at them.",
		seconds(s.At), 100*s.Ratio)
}

// findings are the sentences for a technician.
func findings(h *stationHealth) []string {
	out := []string{}
	say := func(format string, args ...any) { out = append(out, fmt.Sprintf(format, args...)) }
	if m := h.Maintenance; m != nil {
		say("It is under maintenance until %s: %s.", m.To, strings.TrimSuffix(m.Reason, "."))
	}
	if c := h.Clock; c.Off && c.AheadS != nil {
		ahead, side := *c.AheadS, "ahead"
		if ahead < 0 {
			ahead, side = -ahead, "behind, or its messages take that long"
		}
		done := "it is not corrected"
		if c.CorrectedS != 0 {
			done = "its times are corrected"
		}
		say("Its clock is %.1f s %s; %s.", ahead, side, done)
	}
	if h.Neighbours.Doubt >= doubted {
		say("Its neighbours contradict it at the moment: the wind between the masts is worked out as if the odds that it is wrong were %s.",
			wording.Odds(h.Neighbours.Doubt))
		if s := strokeWords(h.stroke); s != "" {
			out = append(out, s)
		}
	}
	for _, word := range h.Neighbours.Named {
		switch t, s := h.Neighbours.TurnedDeg, h.Neighbours.SpeedRatio; word {
		case "turned":
			side := "clockwise"
			if t[1] < 0 {
				side = "anticlockwise"
			}
			low, high := min(math.Abs(t[0]), math.Abs(t[2])), max(math.Abs(t[0]), math.Abs(t[2]))
			say("Against its neighbours its directions are turned %s by %.0f degrees (%.0f to %.0f): look at its alignment, and at what stands around it.",
				side, math.Abs(t[1]), low, high)
		case "reads-low":
			say("Against its neighbours it reads %.0f %% low (%.0f to %.0f): look at its bearings and for ice, and at what stands around it.",
				100*(1-s[1]), 100*(1-s[2]), 100*(1-s[0]))
		case "reads-high":
			say("Against its neighbours it reads %.0f %% high (%.0f to %.0f): look at its settings, and at what stands around the others.",
				100*(s[1]-1), 100*(s[0]-1), 100*(s[2]-1))
		case "blocked":
			say("It stands still while the others blow: it is iced, blocked or broken.")
		}
	}
	if h.Book.Overdue {
		say("Its calibration was due on %s.", h.Book.NextDue)
	}
	return out
}

func seconds(t sensors.Instant) string { return t.Time().Format("2006-01-02T15:04:05Z") }

// sentence is the health in words.
func (h *stationHealth) sentence() string {
	words := stateWords(h.State)
	s := upperFirst(words)
	switch {
	case h.AgeS != nil:
		s += fmt.Sprintf("; its last reading is %.0f s old.", math.Max(0, *h.AgeS))
	case h.State == averages.Never.String():
		s += "."
	default:
		s += "; nothing heard of it yet."
	}
	if len(h.Findings) > 0 {
		s += " " + strings.Join(h.Findings, " ")
	}
	if h.Problem != "" {
		s += " Last problem: " + strings.TrimSuffix(h.Problem, ".") + "."
	}
	return s
}

// object is the health as JSON.
func (h *stationHealth) object() []byte {
	b, err := json.Marshal(h)
	if err != nil { // texts and finite numbers always have a JSON form
		return []byte("null")
	}
	return b
}
