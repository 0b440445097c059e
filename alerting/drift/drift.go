// Package drift takes the ten-minute winds of all masts and says which mast has
// been telling another wind than its neighbours for hours: turned, too low or
// too high, or standing still. What it learns changes only at a UTC hour and
// comes out as a table for the journal. It corrects nothing; engine hands what
// it finds to those who tell it.
//
// Each mast is compared with the median of the others, so that one bad mast
// does not bend what the rest is judged by. A difference that comes from where
// a mast stands looks the same as one of the instrument: the finding says what
// is measured, the technician which it is.
package drift

import (
	"math"
	"slices"
	"time"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

const (
	// Block is how long the means are that are compared: long against the eddies
	// that pass one mast and not the next.
	Block = 10 * time.Minute

	leastSpeed  = 3.0 // m/s; in less the wind differs from mast to mast with good reason
	mostScatter = 0.4 // of the speed: more, and something passes the masts one by one
	leastOthers = 3
	hourBlocks  = 3 // blocks that make an hour count

	hoursUsed  = 24             // the newest that count
	hoursLeast = 12             // below, nothing is named
	hoursKept  = 72 * time.Hour // older ones are forgotten: a windless day is bridged

	// tolerance is what is asked of an instrument: 5 degrees, and 5 % of the
	// speed, half of the 10 % that WMO-No. 8 grants (from memory).
	turnTolerance  = 5.0
	ratioTolerance = 0.05

	// A mast is blocked when it tells less than stillBelow while the others
	// blow, for stillBlocks on end.
	stillBelow  = 0.5 // m/s
	othersAbove = 4.0 // m/s
	stillBlocks = 2
)

// Mean is the wind of one mast over one block, m/s.
type Mean struct {
	Present bool
	Vector  quantity.Vector
	Speed   float64 // scalar
}

// Finding is what is known of one mast against its neighbours, with an interval
// that holds the long-run value in 19 of 20 cases.
type Finding struct {
	Hours int  // that it rests on
	Known bool // enough of them
	// Turned is how far its directions are clockwise of the neighbours', degrees.
	Turned, TurnedLow, TurnedHigh float64
	// Ratio is its speed over that of the neighbours.
	Ratio, RatioLow, RatioHigh float64

	Misaligned bool // the whole interval is more than 5 degrees off
	Low, High  bool // the whole interval is more than 5 % off
	Blocked    bool // it stands still while the others blow
}

// Named says whether a technician should look at the mast.
func (f Finding) Named() bool { return f.Misaligned || f.Low || f.High || f.Blocked }

// hour is what one mast showed in one UTC hour.
type hour struct {
	end      sensors.Instant
	blocks   int
	turned   float64 // mean, degrees
	logRatio float64 // mean of the logarithm of the ratio
}

type mast struct {
	blocks           int // of the hour that runs
	turned, logRatio float64
	still            int // blocks on end, up to stillBlocks
	hours            []hour
	finding          Finding
}

// Watch compares the masts of one airfield. Not safe for concurrent use.
type Watch struct {
	ids   []string
	masts []mast
	east  []float64 // reused
	north []float64
	far   []float64
}

// New watches masts, named in the order in which their means will come.
func New(ids []string) *Watch { return &Watch{ids: slices.Clone(ids), masts: make([]mast, len(ids))} }

// Finding is what is known of a mast.
func (w *Watch) Finding(i int) Finding {
	f := w.masts[i].finding
	f.Blocked = w.masts[i].still >= stillBlocks
	return f
}

// Take compares the means of one block.
func (w *Watch) Take(means []Mean) {
	for i := range w.masts {
		m := &w.masts[i]
		others, scatter, n := w.others(means, i)
		speed := others.Speed()
		if !means[i].Present || n < leastOthers {
			m.still = 0
			continue
		}
		if means[i].Speed < stillBelow && speed >= othersAbove {
			m.still = min(m.still+1, stillBlocks)
			continue // its direction says nothing either
		}
		m.still = 0
		if own := means[i].Vector.Speed(); speed >= leastSpeed && scatter <= mostScatter*speed && own > 0 {
			m.blocks++
			m.turned += signed(means[i].Vector.From() - others.From())
			m.logRatio += math.Log(own / speed)
		}
	}
}

// others is the median wind of the masts but one, how far they lie from it in
// the middle, in m/s, and how many they are. The median of each component is
// moved by one bad mast no farther than to the next good one.
func (w *Watch) others(means []Mean, but int) (v quantity.Vector, scatter float64, n int) {
	w.east, w.north, w.far = w.east[:0], w.north[:0], w.far[:0]
	for j, o := range means {
		if j != but && o.Present {
			w.east, w.north = append(w.east, o.Vector.East), append(w.north, o.Vector.North)
		}
	}
	if n = len(w.east); n == 0 {
		return v, 0, 0
	}
	v = quantity.Vector{East: middle(w.east), North: middle(w.north)}
	for j, o := range means {
		if j != but && o.Present {
			w.far = append(w.far, math.Hypot(o.Vector.East-v.East, o.Vector.North-v.North))
		}
	}
	return v, middle(w.far), n
}

// middle is the median; it reorders its argument.
func middle(x []float64) float64 {
	slices.Sort(x)
	n := len(x)
	return (x[(n-1)/2] + x[n/2]) / 2
}

// signed brings an angle into [-180, 180).
func signed(deg float64) float64 { return quantity.NormalizeDegrees(deg+180) - 180 }

// Turn ends the UTC hour t. It tells whether something was learnt, which Table
// then holds.
func (w *Watch) Turn(t sensors.Instant) (learnt bool) {
	for i := range w.masts {
		m := &w.masts[i]
		if m.blocks >= hourBlocks {
			n := float64(m.blocks)
			// Rounded as the table has it, so that a later start goes on with the
			// same numbers.
			m.learn(hour{t, m.blocks, rounded(m.turned / n), rounded(m.logRatio / n)})
			learnt = true
		}
		m.blocks, m.turned, m.logRatio = 0, 0, 0
		m.forget(t)
		m.finding = m.judge()
	}
	return learnt
}

// rounded to a ten-thousandth.
func rounded(x float64) float64 { return math.Round(x*1e4) / 1e4 }

// learn takes an hour in. Of one that is there already, that with more blocks
// stays: a start that reads back sees the first hour only in part.
func (m *mast) learn(h hour) {
	at, found := slices.BinarySearchFunc(m.hours, h, func(a, b hour) int { return int(min(max(a.end-b.end, -1), 1)) })
	switch {
	case !found:
		m.hours = slices.Insert(m.hours, at, h)
	case h.blocks > m.hours[at].blocks:
		m.hours[at] = h
	}
}

func (m *mast) forget(t sensors.Instant) {
	begin := t.Add(-hoursKept)
	m.hours = slices.DeleteFunc(m.hours, func(h hour) bool { return h.end <= begin })
	if extra := len(m.hours) - hoursUsed; extra > 0 {
		m.hours = slices.Delete(m.hours, 0, extra)
	}
}

// judge is the median of the hours with its interval.
func (m *mast) judge() Finding {
	f := Finding{Hours: len(m.hours)}
	if f.Hours < hoursLeast {
		return f
	}
	f.Known = true
	turned, logs := make([]float64, f.Hours), make([]float64, f.Hours)
	for i, h := range m.hours {
		turned[i], logs[i] = h.turned, h.logRatio
	}
	at, half := centre(turned)
	f.Turned, f.TurnedLow, f.TurnedHigh = at, at-half, at+half
	at, half = centre(logs)
	f.Ratio, f.RatioLow, f.RatioHigh = math.Exp(at), math.Exp(at-half), math.Exp(at+half)
	f.Misaligned = f.TurnedLow > turnTolerance || f.TurnedHigh < -turnTolerance
	f.Low = f.RatioHigh < 1-ratioTolerance
	f.High = f.RatioLow > 1+ratioTolerance
	return f
}

// centre is the median of hourly values and half the width of its interval of
// 95 %. The hours are taken as independent of each other; their spread comes
// from the median absolute deviation, so that an hour with a front does not
// count. A median of n normal values has the standard deviation 1.2533
// sigma/sqrt(n), and sigma is 1.4826 times that deviation (P.J. Huber, Robust
// Statistics, 1981; from memory). 2.2 is Student's t for the fewest hours.
func centre(x []float64) (at, half float64) {
	at = middle(x)
	for i := range x {
		x[i] = math.Abs(x[i] - at)
	}
	return at, 2.2 * 1.2533 * 1.4826 * middle(x) / math.Sqrt(float64(len(x)))
}
