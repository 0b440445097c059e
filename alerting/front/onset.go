package front

import (
	"math"

	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quantity"
)

// ring is how many ticks a mast keeps. A tick is the newest block, taken once
// in its own length (6 s by default), so that ticks do not overlap.
const ring = 128

// What a change is measured against: the mean of the ticks between these ages.
const (
	baseFrom = 60.0  // s
	baseSpan = 180.0 // s
)

// The sequential test (E.S. Page, "Continuous inspection schemes", Biometrika
// 41, 1954): S = max(0, S + x/sd - k), alarm when S > h, and the onset is the
// sample after the last S = 0. k is half the shift looked for, in standard
// deviations. S is written as the greatest sum over the last cusumSpan seconds,
// which is the same thing with an end to its memory.
//
// Wind samples are not independent. sd is that of the long run: of a process
// with integral time T the sum of ticks of w seconds grows as if each had the
// variance 2 sigma2 T / w by itself. With it the average run length without a
// change at the least k is Siegmund's (e^(-2Db) + 2Db - 1)/(2D2), D = -k,
// b = h + 1.166 (D. Siegmund, Sequential Analysis, 1985): 938 ticks in one
// direction, an hour and a half. leastShift makes k larger: in air of class B
// (IEC 61400-1) a mast goes off by chance, in all eight directions together, 2
// times in 60 hours at 3 m/s, 8 times at 10 and 20 times at 15 m/s
// (TestChanceAlarms). No front is told of one mast alone.
const (
	cusumLeastK = 0.5
	cusumH      = 5.0
	cusumSpan   = 240.0 // s
	leastShift  = 4.0   // m/s, the shift looked for
	directions  = 8     // ways in which the wind may change
)

// Of an onset that has been found.
const (
	settles = 150.0 // s after the middle of the change its fit is renewed
	// renewed is how many ticks behind a change the new wind needs to be measured
	// against; until then nothing counts toward another alarm at the mast.
	renewed = 12
	judged  = 60.0 // s after the alarm a change below leastChange is dropped
	// leastChange is what the wind must change at a mast to count, m/s, and
	// leastRatio the same in standard deviations of the ticks before.
	leastChange = 3.0
	leastRatio  = 2.0
	slowness    = 8.0  // part of its length by which the middle of a change is unsure
	priorChange = 10.0 // m/s, scale of the change in its fit
)

// tick is one block of one mast.
type tick struct {
	at          sensors.Instant // its end; 0 when never used
	v           quantity.Vector
	dx, dy      float64 // less the mean before, in long-run deviations
	k           float64 // in the same
	sd          float64 // the long-run deviation, m/s
	have, based bool
}

// onset is a change at one mast.
type onset struct {
	mast          int
	alarm         sensors.Instant
	at            float64 // s after the alarm (before: negative): the middle of the change
	sd            float64 // its standard error, s
	lasts         float64 // s
	before, after quantity.Vector
	noise         float64 // long-run deviation of a tick, m/s
	settled       bool
	since         sensors.Instant // when the change before it at the mast was over; 0: none was
}

// over is when a change has come to its end.
func (o *onset) over() sensors.Instant {
	return o.alarm + sensors.Instant((o.at+float64(o.lasts/2))*1000)
}

// from is the middle of the change in s after an instant.
func (o *onset) from(t sensors.Instant) float64 { return o.at + o.alarm.Sub(t).Seconds() }

func (o *onset) change() quantity.Vector {
	return quantity.Vector{East: o.after.East - o.before.East, North: o.after.North - o.before.North}
}

// watch is the memory of one mast.
type watch struct {
	ticks [ring]tick
	// over is when the last change that was found ended: what came before is
	// another wind. 0: none was.
	over sensors.Instant
}

// clockwork is how time is cut into ticks.
type clockwork struct {
	w     int // seconds in a tick
	width sensors.Instant
}

func (c clockwork) slot(t sensors.Instant) int { return int((t / c.width) % ring) }

func (c clockwork) count(seconds float64) int { return max(int(seconds)/c.w, 1) }

// at is the tick that ended n ticks before t; nil if it holds nothing.
func (w *watch) at(c clockwork, t sensors.Instant, n int) *tick {
	e := t - sensors.Instant(n)*c.width
	k := &w.ticks[c.slot(e)]
	if k.at != e || !k.have {
		return nil
	}
	return k
}

// take keeps the newest block of a mast as the tick that ends at t, and works
// out how far it is from what came before.
func (w *watch) take(c clockwork, t sensors.Instant, m *averages.Mast) {
	k := &w.ticks[c.slot(t)]
	*k = tick{at: t}
	if m.State != averages.Live || !m.Blocks[0].Present {
		return
	}
	k.have = true
	k.v = quantity.Vector{East: m.Blocks[0].East, North: m.Blocks[0].North}
	base, spread, ok := w.base(c, t)
	if !ok {
		return
	}
	air := m.Turbulence
	if air.Seconds == 0 {
		air = averages.Expected(base.Speed())
	}
	long := 2 * float64(air.Variance*air.Time) / float64(c.w)
	k.sd = math.Sqrt(max(long, spread, 0.09))
	k.dx, k.dy = (k.v.East-base.East)/k.sd, (k.v.North-base.North)/k.sd
	k.k = max(cusumLeastK, leastShift/2/k.sd)
	k.based = true
}

// base is the mean of the ticks some minutes before t, and the variance of one
// component about it; false if fewer than half of them are there. Behind a change
// only what came after it counts.
func (w *watch) base(c clockwork, t sensors.Instant) (mean quantity.Vector, spread float64, ok bool) {
	first, n := c.count(baseFrom), c.count(baseSpan)
	least := (n + 1) / 2
	got := 0
	squares := 0.0
	for i := first; i < first+n; i++ {
		if w.over != 0 && t-sensors.Instant(i+1)*c.width < w.over {
			least = min(least, renewed)
			break
		}
		k := w.at(c, t, i)
		if k == nil {
			continue
		}
		got++
		mean.East += k.v.East
		mean.North += k.v.North
		squares += float64(k.v.East*k.v.East) + float64(k.v.North*k.v.North)
	}
	if got < max(least, 3) {
		return quantity.Vector{}, 0, false
	}
	g := float64(got)
	mean.East /= g
	mean.North /= g
	spread = (squares/g - float64(mean.East*mean.East) - float64(mean.North*mean.North)) / 2
	return mean, max(spread, 0), true
}

// test is the sequential test at t, over all directions: whether it gives an
// alarm, and after how many ticks before t its sum began. After an alarm it
// begins anew once there is enough of the new wind to be measured against.
func (w *watch) test(c clockwork, t sensors.Instant) (began int, alarm bool) {
	n := c.count(cusumSpan)
	if w.over != 0 {
		since := t.Sub(w.over).Seconds() - baseFrom
		if since <= 0 {
			return 0, false
		}
		n = min(n, c.count(since))
	}
	best := cusumH
	for d := range directions {
		sin, cos := math.Sincos(2 * math.Pi * float64(d) / directions)
		sum := 0.0
		for i := range n {
			k := w.at(c, t, i)
			if k == nil || !k.based {
				break
			}
			sum += float64(k.dx*sin) + float64(k.dy*cos) - k.k
			if sum > best {
				best, began, alarm = sum, i, true
			}
		}
	}
	return began, alarm
}

// The lengths of the change that are tried, s; the first stands for a step.
const lengths = 5

func lengthOf(i int, w float64) float64 {
	switch i {
	case 0:
		return w
	case 1:
		return 30
	case 2:
		return 60
	case 3:
		return 120
	}
	return 240
}

// settle fits a change to the ticks about the onset: a mean before, a ramp, and
// a mean after, for every middle and length that is tried. What is kept is the
// mean over all of them, each weighted by exp(-SSR/(2 sd2)): the fit by least
// squares, with the standard error that its choice of a place has. zero is the
// epoch from which seconds count, first and last the middles tried.
func (f *fitter) settle(w *watch, c clockwork, t sensors.Instant, o *onset, first, last float64) {
	width := float64(c.w)
	now := t.Sub(o.alarm).Seconds()
	f.gather(w, c, t, c.count(now-first+180), o.since)
	f.variance = float64(o.noise * o.noise)
	var sum, sumT, sumTT, sumL float64
	var before, after quantity.Vector
	best := math.Inf(-1)
	for l := range lengths {
		length := lengthOf(l, width)
		for mid := first; mid <= min(last, now-width); mid += float64(width / 2) {
			b, a, ssr, ok := f.ramp(now-mid, length)
			if !ok {
				continue
			}
			like, weight := -ssr/(2*f.variance), 1.0
			if like > best {
				scale := math.Exp(best - like) // 0 at first
				sum, sumT, sumTT, sumL = sum*scale, sumT*scale, sumTT*scale, sumL*scale
				before, after = scaled(before, scale), scaled(after, scale)
				best = like
			} else {
				weight = math.Exp(like - best)
			}
			// Counted from the first, so that the squares keep their digits.
			d := mid - first
			sum += weight
			sumT += float64(weight * d)
			sumTT += float64(weight * float64(d*d))
			sumL += float64(weight * length)
			before = quantity.Vector{East: before.East + float64(weight*b.East), North: before.North + float64(weight*b.North)}
			after = quantity.Vector{East: after.East + float64(weight*a.East), North: after.North + float64(weight*a.North)}
		}
	}
	if sum == 0 {
		return // too little behind the change yet: what is known stays
	}
	mean := sumT / sum
	o.at = first + mean
	// Half a tick is as fine as times are cut, and no edge is sharper than that.
	// The middle of a slow change is where the eddies put it.
	o.lasts = sumL / sum
	slow := o.lasts / slowness
	o.sd = math.Sqrt(max(sumTT/sum-float64(mean*mean), 0) + float64(width*width)/12 + float64(slow*slow))
	o.before, o.after = scaled(before, 1/sum), scaled(after, 1/sum)
}

func scaled(v quantity.Vector, by float64) quantity.Vector {
	return quantity.Vector{East: float64(v.East * by), North: float64(v.North * by)}
}

// fitter is the scratch of settle.
type fitter struct {
	n        int
	age      [ring]float64 // s, of the middle of a tick
	v        [ring]quantity.Vector
	variance float64
	squares  float64 // sum of the squares of all components
	e, en    float64 // their sums
}

// gather copies the last ticks of a mast, newest first, that begin at since or
// later.
func (f *fitter) gather(w *watch, c clockwork, t sensors.Instant, back int, since sensors.Instant) {
	f.n, f.squares, f.e, f.en = 0, 0, 0, 0
	for i := range min(back, ring-1) {
		if t-sensors.Instant(i+1)*c.width < since {
			break
		}
		k := w.at(c, t, i)
		if k == nil {
			continue
		}
		f.age[f.n], f.v[f.n] = float64(i*c.w)+float64(float64(c.w)/2), k.v
		f.n++
		f.e += k.v.East
		f.en += k.v.North
		f.squares += float64(k.v.East*k.v.East) + float64(k.v.North*k.v.North)
	}
}

// ramp fits v = before (1 - r) + after r, where r grows from 0 to 1 over length
// seconds about the moment age seconds ago. The change has a normal prior, so
// that one tick behind it does not make it huge.
func (f *fitter) ramp(age, length float64) (before, after quantity.Vector, ssr float64, ok bool) {
	var r1, r2, re, rn float64
	for i := range f.n {
		r := min((age-f.age[i])/length+0.5, 1)
		if r <= 0 {
			break // what is older lies before the change, too
		}
		r1 += r
		r2 += float64(r * r)
		re += float64(r * f.v[i].East)
		rn += float64(r * f.v[i].North)
	}
	n := float64(f.n)
	if n-r1 < 5 || r1 < 0.5 {
		return before, after, 0, false
	}
	// Unknowns: before, and the change d = after - before, with the ridge q.
	q := r2 + f.variance/(priorChange*priorChange)
	det := float64(n*q) - float64(r1*r1)
	be, bn := (float64(f.e*q)-float64(r1*re))/det, (float64(f.en*q)-float64(r1*rn))/det
	de, dn := (float64(n*re)-float64(r1*f.e))/det, (float64(n*rn)-float64(r1*f.en))/det
	ssr = f.squares - float64(be*f.e) - float64(bn*f.en) - float64(de*re) - float64(dn*rn)
	return quantity.Vector{East: be, North: bn}, quantity.Vector{East: be + de, North: bn + dn}, ssr, true
}
