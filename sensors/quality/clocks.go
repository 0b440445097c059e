package quality

import (
	"encoding/json"
	"fmt"
	"slices"
	"time"

	"sockline/sensors"
)

// What a station says of the time is compared with the arrival of its messages.
// A message cannot arrive before it was sent, so the least of the differences
// shows the clock, and the rest the network: the smallest of every minute, and
// of ten minutes the median, so that no single message decides.
const (
	clockSpan    = 10 // minutes
	clockLeast   = 3  // minutes from which on something is said
	clockGrain   = 100 * time.Millisecond
	clockOff     = 500 * time.Millisecond // from here on a clock is called off
	clockBack    = 300 * time.Millisecond // below, a correction ends
	clockFar     = 10 * time.Minute       // a clock farther off is not corrected
	clockSteady  = 200 * time.Millisecond // minutes that agree so well show one clock
	secondWithin = 500 * time.Millisecond // of the least: a least that stands alone is chance, or a backlog

	// The clock of this host shows as an error that the stations share. What is
	// taken out of it moves by one grain a minute at most, which is faster than
	// an arrival clock is slewed (60 ms a minute).
	sharedLeast    = 300 * time.Millisecond
	sharedMost     = 5 * time.Second // farther, the stations may all be late
	sharedAgree    = 300 * time.Millisecond
	sharedStations = 3
)

// Skew is what is known of the clock of a station.
type Skew struct {
	Known bool
	// Ahead is how far the clock is ahead of the arrival stamps, less the
	// fastest way of a message: a clock that is right shows as behind by that
	// way.
	Ahead   time.Duration
	Off     bool          // far enough to be told
	Applied time.Duration // what is taken off its times, with what all share; whole 100 ms
}

// Clocks watches the clocks of all stations and takes known errors out of the
// times of their readings. What it takes out changes only in Turn, once a UTC
// minute.
type Clocks struct {
	masts  []clock
	ids    []string
	shared time.Duration // taken out of the times of every station
}

// clock is that of one station. Durations are how far it is ahead.
type clock struct {
	correct bool
	// The greatest two of the minute that runs. The greatest lead is the least
	// way.
	n             int
	first, second time.Duration
	minutes       []lead // of the last ten minutes
	ahead         time.Duration
	known         bool
	applied       time.Duration // for this station alone
}

type lead struct {
	at    sensors.Instant
	ahead time.Duration
}

// NewClocks watches stations of which nothing has come in yet.
func NewClocks(stations []sensors.Station) *Clocks {
	c := &Clocks{masts: make([]clock, len(stations))}
	for i, s := range stations {
		c.masts[i].correct = s.CorrectClock
		c.ids = append(c.ids, s.ID)
	}
	return c
}

// Take notes the times of a reading as it was decoded and returns it with the
// known error taken out. A reading without a time of its own has that of its
// arrival, which is right.
func (c *Clocks) Take(r sensors.Reading) sensors.Reading {
	if r.Retained || r.Time == r.Arrival {
		return r
	}
	m := &c.masts[r.Station]
	ahead := r.Time.Sub(r.Arrival)
	switch {
	case m.n == 0:
		m.first = ahead
	case ahead > m.first:
		m.first, m.second = ahead, m.first
	case m.n == 1 || ahead > m.second:
		m.second = ahead
	}
	m.n++
	r.Time = r.Time.Add(-m.applied - c.shared)
	return r
}

// Turn ends the UTC minute t. It tells whether what is taken out of the times
// has changed.
func (c *Clocks) Turn(t sensors.Instant) (changed bool) {
	for i := range c.masts {
		c.masts[i].turn(t)
	}
	before := c.shared
	c.turnShared()
	changed = c.shared != before
	for i := range c.masts {
		changed = c.masts[i].apply(c.shared) || changed
	}
	return changed
}

func (m *clock) turn(t sensors.Instant) {
	if m.n == 1 || (m.n > 1 && m.first-m.second <= secondWithin) {
		m.minutes = append(m.minutes, lead{t, m.first})
	}
	m.n = 0
	begin := t.Add(-clockSpan * time.Minute)
	m.minutes = slices.DeleteFunc(m.minutes, func(l lead) bool { return l.at <= begin })
	if m.known = len(m.minutes) >= clockLeast; !m.known {
		return
	}
	newest := m.minutes[len(m.minutes)-clockLeast:]
	all, last := medianLead(m.minutes), medianLead(newest)
	// A clock that was set shows in the newest minutes: they agree with one
	// another and no more with those before, which are forgotten.
	if spread(newest) <= clockSteady && (last-all).Abs() > clockBack {
		m.minutes = slices.Clone(newest)
		all = last
	}
	m.ahead = all
}

func medianLead(l []lead) time.Duration {
	d := make([]time.Duration, len(l))
	for i := range l {
		d[i] = l[i].ahead
	}
	return median(d)
}

func median(d []time.Duration) time.Duration {
	slices.Sort(d)
	return d[len(d)/2]
}

func spread(l []lead) time.Duration {
	least, most := l[0].ahead, l[0].ahead
	for _, v := range l {
		least, most = min(least, v.ahead), max(most, v.ahead)
	}
	return most - least
}

// turnShared follows the error that at least two thirds of the stations share.
func (c *Clocks) turnShared() {
	var all []time.Duration
	for i := range c.masts {
		if m := &c.masts[i]; m.known {
			all = append(all, m.ahead)
		}
	}
	if len(all) < sharedStations {
		return
	}
	mid, agree := median(all), 0
	for _, a := range all {
		if (a - mid).Abs() <= sharedAgree {
			agree++
		}
	}
	want := mid.Round(clockGrain)
	switch {
	case 3*agree < 2*len(all) || mid.Abs() > sharedMost:
		return
	case mid.Abs() < sharedLeast:
		want = 0
	case (mid - c.shared).Abs() <= clockGrain:
		return // a grain to and fro is noise
	}
	c.shared += min(max(want-c.shared, -clockGrain), clockGrain)
}

// apply decides what is taken out of one station's times beyond what all share.
func (m *clock) apply(shared time.Duration) (changed bool) {
	if !m.correct || !m.known {
		return false
	}
	own := m.ahead - shared
	want := m.applied
	switch {
	case own.Abs() < clockBack || own.Abs() > clockFar:
		want = 0
	case own.Abs() >= clockOff && (own-m.applied).Abs() > clockGrain:
		want = own.Round(clockGrain)
	}
	changed = want != m.applied
	m.applied = want
	return changed
}

// Skew is what is known of the clock of a station.
func (c *Clocks) Skew(station int) Skew {
	m := &c.masts[station]
	s := Skew{Known: m.known, Applied: m.applied + c.shared}
	if m.known {
		s.Ahead = m.ahead
		s.Off = (m.ahead - c.shared).Abs() >= clockOff
	}
	return s
}

// Shared is how far the clocks of the stations agree to be ahead of this
// host's; it is taken out of all their times.
func (c *Clocks) Shared() time.Duration { return c.shared }

// clockTable is the form in which what is taken out is journalled.
type clockTable struct {
	SharedMS int64            `json:"shared_ms"`
	AheadMS  map[string]int64 `json:"ahead_ms"` // by station, only where not 0
}

// Table is what is taken out of the times, as JSON.
func (c *Clocks) Table() []byte {
	t := clockTable{SharedMS: c.shared.Milliseconds(), AheadMS: map[string]int64{}}
	for i := range c.masts {
		if a := c.masts[i].applied; a != 0 {
			t.AheadMS[c.ids[i]] = a.Milliseconds()
		}
	}
	b, err := json.Marshal(t)
	if err != nil { // whole numbers and ids always have a JSON form
		return nil
	}
	return b
}

// Load goes on with the table of an earlier run, so that a start does not lose
// the minutes until the clocks are known again. A station that is not to be
// corrected any more, or is gone, is left out.
func (c *Clocks) Load(table []byte) error {
	var t clockTable
	if err := json.Unmarshal(table, &t); err != nil {
		return fmt.Errorf("read the table of clock errors: %w", err)
	}
	whole := func(ms int64, most time.Duration) (time.Duration, bool) {
		d := time.Duration(ms) * time.Millisecond
		return d, ms > -1e7 && ms < 1e7 && d.Abs() <= most && d%clockGrain == 0
	}
	shared, ok := whole(t.SharedMS, sharedMost)
	if !ok {
		return fmt.Errorf("read the table of clock errors: %d ms cannot be shared by the stations", t.SharedMS)
	}
	for id, ms := range t.AheadMS {
		d, ok := whole(ms, clockFar+clockGrain)
		if !ok {
			return fmt.Errorf("read the table of clock errors: station %s: %d ms is not a correction", id, ms)
		}
		if i := slices.Index(c.ids, id); i >= 0 && c.masts[i].correct {
			c.masts[i].applied = d
		}
	}
	c.shared = shared
	return nil
}
