package averages

import (
	"math"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// A vane that slips, or cups that lose an arm, change what an instrument says
// from one second to the next and for good, while the air takes several seconds
// to turn or to calm: a gust front whose change is 100 m wide passes in 10 s
// at 10 m/s. A change at one stroke is therefore held to speak of the
// instrument, but only if the mast has not done the like of it in the last minutes,
// by its own measure. It is no proof, and takes nothing away: the analysis weighs
// whether the neighbours bear it out. An instrument that reports more rarely than
// every two seconds is not asked: by its next report the air may have turned, too.

const (
	// The second in which a stroke fell may hold both; those beside it are compared.
	strokeAcross  = 2
	strokeAfter   = 4   // s of the new state that are waited for
	strokeMeasure = 300 // s before it that it is measured by
	strokeLeast   = 60  // comparisons in them below which nothing is said
	// strokeExcess is how often the greatest change of those minutes a stroke is.
	strokeExcess = 1.5
	strokeKept   = 0.7 // share of it that must stay

	// strokeVector is the least change of the wind that matters, m/s.
	strokeVector = 3.0

	leastTurn  = 15 * math.Pi / 180 // radians
	leastLoss  = 0.2                // of the logarithm of the speed: down to 0.8
	steadyTurn = 20 * math.Pi / 180 // a loss of speed with more of a turn is none
	steadyRate = 0.5                // a turn with more of a change of the logarithm of the speed is none
)

// Stroke is a change of an instrument from one second to the next.
type Stroke struct {
	At sensors.Instant // end of the second in which it fell; 0: there was none
	// Turn is by how much the direction that it tells changed, radians from east to
	// north, and Ratio the speed that it tells over the one before; one of them
	// has not changed.
	Turn, Ratio float64
}

// Undone is the wind that the instrument would have told without the stroke.
func (s *Stroke) Undone(east, north float64) (float64, float64) {
	sin, cos := math.Sincos(-s.Turn)
	return (float64(east*cos) - float64(north*sin)) / s.Ratio, (float64(east*sin) + float64(north*cos)) / s.Ratio
}

// change is what became of the wind of a mast.
type change struct {
	second     sensors.Instant // at its end; 0 when never used
	vector     float64         // its magnitude, m/s
	turn, rate float64         // of the direction, radians, and of the logarithm of the speed
}

// seeStroke takes in the second that ended strokeAfter seconds before t and finds
// out whether the instrument changed just before it.
func (m *mast) seeStroke(t sensors.Instant) {
	at := t - strokeAfter*sensors.Second
	before := at - strokeAcross*sensors.Second
	c, ok := m.between(before, 1, at, 1)
	if !ok {
		return
	}
	c.second = at
	m.changes[slot(at)] = c
	if c.vector < strokeVector || math.Abs(c.turn) < leastTurn && c.rate > -leastLoss {
		return
	}
	after, ok := m.between(before, strokeAfter, t, strokeAfter)
	turned := math.Abs(after.rate) <= steadyRate && math.Abs(c.turn) >= leastTurn &&
		math.Copysign(after.turn, float64(after.turn*c.turn)) >= max(leastTurn, strokeKept*math.Abs(c.turn))
	slowed := math.Abs(after.turn) <= steadyTurn && c.rate <= -leastLoss &&
		-after.rate >= max(leastLoss, -strokeKept*c.rate)
	if !ok || after.vector < strokeVector || !turned && !slowed {
		return
	}
	usualTurn, usualLoss, ok := m.usual(at)
	turned = turned && math.Abs(c.turn) >= strokeExcess*usualTurn
	slowed = slowed && -c.rate >= strokeExcess*usualLoss
	// The same stroke shows in two seconds: the first has it at its right place.
	fell := at - strokeAcross/2*sensors.Second
	if !ok || !turned && !slowed || fell-m.stroke.At <= strokeAcross*sensors.Second {
		return
	}
	m.stroke = Stroke{At: fell, Turn: after.turn, Ratio: 1}
	if !turned {
		m.stroke = Stroke{At: fell, Ratio: math.Exp(after.rate)}
	}
}

// usual is the greatest turn and loss of the minutes before a second; false where too
// little is known of them.
func (m *mast) usual(at sensors.Instant) (turn, loss float64, ok bool) {
	n := 0
	for k := strokeAcross + 1; k < strokeMeasure; k++ {
		second := at - sensors.Instant(k)*sensors.Second
		if c := &m.changes[slot(second)]; c.second == second {
			n++
			turn, loss = math.Max(turn, math.Abs(c.turn)), math.Max(loss, -c.rate)
		}
	}
	return turn, loss, n >= strokeLeast
}

// between is the change from the n seconds up to one instant to the k up to
// another; false where seconds are missing, or in a calm.
func (m *mast) between(before sensors.Instant, n int, after sensors.Instant, k int) (c change, ok bool) {
	u, known := m.vector(before, n)
	v, still := m.vector(after, k)
	if !known || !still || u.Speed() < calmBelow || v.Speed() < calmBelow {
		return c, false
	}
	return change{
		vector: math.Hypot(v.East-u.East, v.North-u.North),
		turn: math.Atan2(float64(u.East*v.North)-float64(u.North*v.East),
			float64(u.East*v.East)+float64(u.North*v.North)),
		rate: math.Log(v.Speed() / u.Speed()),
	}, true
}

// vector is the mean over the n seconds up to an instant, of which three in four
// that the instrument sends must be there.
func (m *mast) vector(end sensors.Instant, n int) (mean quantity.Vector, ok bool) {
	count := 0
	for k := range n {
		if v, ok := m.wind(end - sensors.Instant(k)*sensors.Second); ok {
			mean.East += v.East
			mean.North += v.North
			count++
		}
	}
	mean.East /= float64(max(count, 1))
	mean.North /= float64(max(count, 1))
	return mean, 4*count >= 3*max(n/m.interval, 1)
}

// unbroken is which seconds of a block, counted back from its end, are of one
// state of the instrument: where it changed inside, those of the longer side, and in
// the newest block those after it.
func (m *mast) unbroken(b int, end sensors.Instant, seconds int) (first, last int) {
	k := int((end - m.stroke.At) / sensors.Second)
	switch {
	case m.stroke.At == 0 || k < 0 || k >= seconds:
		return 0, seconds
	case b == 0 && k > 0 || k >= seconds-1-k:
		return 0, k
	}
	return k + 1, seconds
}
