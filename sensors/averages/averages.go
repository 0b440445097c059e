// Package averages turns the checked readings of each mast into what the
// analysis works on, block means of the wind vector and the turbulence around
// them (one Snapshot per step), and, when asked, into the Wind that people
// read: means, gusts, variation and shifts. Next: alerting/windfield.
//
// Everything is kept in one bin per second, so that irregular and fast
// instruments weigh the same as slow ones. Directions are never averaged as
// numbers: only vector components are.
package averages

import (
	"time"

	"sockline/sensors"
	"sockline/sensors/correction"
	"sockline/sensors/quality"
	"sockline/sensors/quantity"
)

// memory is how many seconds of bins a mast keeps: ten minutes of turbulence,
// the longest block sequence before it, and the minute by which the turbulence
// estimate may lag.
const memory = 1024

// Blocks is the number of consecutive stretches of the recent past whose means
// the analysis uses, newest first.
const Blocks = 3

// State of a mast.
type State uint8

// The states of a mast. Only a live mast serves any ground.
const (
	Lost     State = iota // nothing for over a minute
	Stale                 // nothing for longer than its stale_after
	Starting              // reporting, but its window is less than two thirds full
	Live
	Never       // nothing since the recorder was made
	Maintenance // somebody works on it
)

// String is the state's word.
func (s State) String() string {
	switch s {
	case Lost:
		return "lost"
	case Stale:
		return "stale"
	case Starting:
		return "starting"
	case Live:
		return "live"
	case Never:
		return "never-seen"
	case Maintenance:
		return "under-maintenance"
	}
	return "unknown"
}

// lostAfter is when a stale mast is called lost.
const lostAfter = time.Minute

// Block is the vector mean of one stretch of the recent past.
type Block struct {
	East, North float64 // m/s
	Present     bool    // at least two thirds of the expected seconds hold data
}

// Mast is what a snapshot says of one mast.
type Mast struct {
	State    State
	Blocks   [Blocks]Block
	Last     sensors.Instant // event time of the newest reading, 0 if none is remembered
	Exercise bool            // a reading of the newest window marks itself as synthetic
	Late     bool            // it is live or starting, and its newest reading is overdue

	Turbulence Turbulence // from the ten minutes before the blocks

	Stroke Stroke // the last one of its instrument, however long ago
}

// Snapshot is the state of every mast at one step. It is made only by
// Recorder.Snapshot and is valid until the next one.
type Snapshot struct {
	at    sensors.Instant
	masts []Mast
}

// At is the step.
func (s *Snapshot) At() sensors.Instant { return s.at }

// Len is the number of masts, live or not.
func (s *Snapshot) Len() int { return len(s.masts) }

// Mast is the state of the mast with the index of its station.
func (s *Snapshot) Mast(i int) *Mast { return &s.masts[i] }

// Layout is how the recent past is cut into blocks.
type Layout struct {
	Seconds [Blocks]int // length of each block, newest first
}

// NewLayout cuts the past for an analysis window: the newest block is a third
// of the window, the next two thirds, the oldest twice the window. The window
// itself (the first two) must be two thirds full before a mast is live.
func NewLayout(window time.Duration) Layout {
	s := max(int(window/time.Second), 6)
	return Layout{Seconds: [Blocks]int{s / 3, s - s/3, 2 * s}}
}

// Age is the age of the middle of block b in seconds.
func (l Layout) Age(b int) float64 {
	start := 0
	for i := range b {
		start += l.Seconds[i]
	}
	return float64(start) + float64(float64(l.Seconds[b])/2)
}

// Total is the length of all blocks together in seconds.
func (l Layout) Total() int {
	n := 0
	for _, s := range l.Seconds {
		n += s
	}
	return n
}

// bin holds the readings of one second.
type bin struct {
	second      sensors.Instant // end of the second; 0 when never used
	east, north float64         // sums, m/s
	speed       float64         // sum, m/s
	raw         float64         // sum as measured, before any correction, m/s
	high, low   float64         // greatest and smallest reading, m/s
	n           int
	exercise    bool

	air      quantity.Vector // sum of the readings that the analysis believes, m/s
	believed int             // how many those are
}

type mast struct {
	station    *sensors.Station
	interval   int // seconds between reports, at least 1
	corrector  *correction.Corrector
	staleAfter time.Duration
	last       sensors.Instant
	held       []sample // that stand out
	bins       [memory]bin
	siting     Siting
	turbulence Turbulence
	changes    [memory]change // over strokeAcross seconds, by the second at their end
	stroke     Stroke         // the last
}

// Recorder keeps the bins of every mast. Not safe for concurrent use.
type Recorder struct {
	layout   Layout
	masts    []mast
	snapshot Snapshot
	series   series // of the last Wind asked for
}

// NewRecorder keeps bins for the stations, in their order.
func NewRecorder(stations []sensors.Station, layout Layout) *Recorder {
	r := &Recorder{layout: layout, masts: make([]mast, len(stations))}
	for i, s := range stations {
		r.masts[i].interval = max(int((s.Interval+time.Second-1)/time.Second), 1)
		r.masts[i].station = &stations[i]
		r.masts[i].staleAfter = s.StaleAfter
		r.masts[i].corrector = correction.New(s)
		r.masts[i].held = make([]sample, 0, quality.LongestSpike)
	}
	r.snapshot.masts = make([]Mast, len(stations))
	return r
}

// Add records a reading that quality did not reject. Readings come in event
// order within a step. People's averages hold it at once; the analysis waits for what
// the next reading tells of one that stands out, and leaves spikes out.
func (r *Recorder) Add(c quality.Checked) {
	if !c.Usable() {
		return
	}
	rd := c.Reading()
	m := &r.masts[rd.Station]
	m.last = max(m.last, rd.Time)
	if c.Spikes() {
		m.held = m.held[:0]
	}
	if !c.Waits() {
		m.release()
	}
	if _, under := m.station.UnderMaintenance(rd.Time); under {
		return // a vane that is turned by hand tells no wind
	}
	if s := m.add(rd); c.Waits() {
		m.held = append(m.held, s)
	} else {
		m.believe(s)
	}
}

// sample is the wind of a reading, as corrected.
type sample struct {
	second sensors.Instant // that it belongs to
	v      quantity.Vector // m/s
}

// add puts a reading into its bin, for people's averages.
func (m *mast) add(rd sensors.Reading) sample {
	second := rd.Time.CeilSecond()
	b := &m.bins[slot(second)]
	if b.second != second {
		*b = bin{second: second}
	}
	// What was measured is not written over: the correction stands beside it.
	speed := m.corrector.Of(rd).Speed
	v := quantity.FromDirection(speed, rd.From)
	b.east += v.East
	b.north += v.North
	b.speed += speed
	b.raw += rd.Speed
	if b.n == 0 || speed > b.high {
		b.high = speed
	}
	if b.n == 0 || speed < b.low {
		b.low = speed
	}
	b.n++
	b.exercise = b.exercise || rd.Exercise
	return sample{second: second, v: v}
}

// believe puts a sample into the wind that the analysis works on.
func (m *mast) believe(s sample) {
	if b := &m.bins[slot(s.second)]; b.second == s.second {
		b.air.East += s.v.East
		b.air.North += s.v.North
		b.believed++
	}
}

// slot is the place of a second in the ring.
func slot(second sensors.Instant) int { return int((second / sensors.Second) & (memory - 1)) }

// at is the bin of the second that ends at s, or nil when it holds nothing.
func (m *mast) at(s sensors.Instant) *bin {
	b := &m.bins[slot(s)]
	if b.second != s || b.n == 0 {
		return nil
	}
	return b
}

// wind is the mean wind that the analysis believes of the second that ends at s.
func (m *mast) wind(s sensors.Instant) (v quantity.Vector, ok bool) {
	b := &m.bins[slot(s)]
	if b.second != s || b.believed == 0 {
		return v, false
	}
	n := float64(b.believed)
	return quantity.Vector{East: b.air.East / n, North: b.air.North / n}, true
}

// Snapshot is what is known at step t. The result is overwritten by the next
// call.
func (r *Recorder) Snapshot(t sensors.Instant) *Snapshot {
	r.snapshot.at = t
	minute := (t/sensors.Second)%60 == 0
	for i := range r.masts {
		m := &r.masts[i]
		if minute {
			// Once a UTC minute, so that the estimate (and with it the gain
			// cache) changes seldom and depends on nothing but the bins.
			m.turbulence = m.estimateTurbulence(t, r.layout)
		}
		m.settle(t)
		if m.interval <= strokeAcross {
			m.seeStroke(t)
		}
		r.fill(&r.snapshot.masts[i], m, t)
	}
	return &r.snapshot
}

// mean is the mean wind of the seconds from first up to last, counted back from end, that
// the analysis believes, and how many of them the mast was heard in. Where it was, and
// all of it waits or was a spike, it is the mean of all that was heard: a mast that
// reports is not silent.
func (m *mast) mean(end sensors.Instant, first, last int) (v quantity.Vector, heard int, exercise bool) {
	var all quantity.Vector
	believed := 0
	for k := first; k < last; k++ {
		second := end - sensors.Instant(k)*sensors.Second
		b := m.at(second)
		if b == nil {
			continue
		}
		heard++
		exercise = exercise || b.exercise
		all.East += b.east / float64(b.n)
		all.North += b.north / float64(b.n)
		if w, ok := m.wind(second); ok {
			believed++
			v.East += w.East
			v.North += w.North
		}
	}
	n := float64(believed)
	if believed == 0 {
		v, n = all, float64(max(heard, 1))
	}
	return quantity.Vector{East: v.East / n, North: v.North / n}, heard, exercise
}

// settle believes what has waited for longer than the next reading may take.
func (m *mast) settle(t sensors.Instant) {
	if n := len(m.held); n > 0 && t.Sub(m.held[n-1].second) > quality.LongestWait {
		m.release()
	}
}

// release believes all that waits.
func (m *mast) release() {
	for _, h := range m.held {
		m.believe(h)
	}
	m.held = m.held[:0]
}

func (r *Recorder) fill(out *Mast, m *mast, t sensors.Instant) {
	*out = Mast{Last: m.last, Turbulence: m.turbulence, Stroke: m.stroke}
	age := t.Sub(m.last)
	_, under := m.station.UnderMaintenance(t)
	switch {
	case under:
		out.State = Maintenance
		m.stroke = Stroke{} // somebody sees to it
		return
	case m.last == 0:
		out.State = Never
		return
	case age > lostAfter:
		out.State = Lost
		return
	case age > m.staleAfter:
		out.State = Stale
		return
	}
	// A reading of the second that has just ended counts as in time, so a second
	// is added to the interval.
	out.Late = age > m.station.Interval+time.Second
	end := t
	filled, want := 0, 0
	for b, seconds := range r.layout.Seconds {
		first, last := m.unbroken(b, end, seconds)
		v, heard, exercise := m.mean(end, first, last)
		end -= sensors.Instant(seconds) * sensors.Second
		expected := max((last-first)/m.interval, 1)
		v = m.siting.remove(v)
		out.Blocks[b] = Block{East: v.East, North: v.North, Present: heard > 0 && 3*heard >= 2*expected}
		out.Exercise = out.Exercise || exercise
		if b < 2 {
			filled += heard
			want += expected
		}
	}
	out.State = Starting
	// The newest block must hold something itself: a mast whose last seconds
	// are missing says nothing of now.
	if 3*filled >= 2*want && out.Blocks[0].Present {
		out.State = Live
	}
}
