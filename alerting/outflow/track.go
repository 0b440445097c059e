package outflow

import (
	"math"

	"sockline/sensors"
)

// track is where one outflow was over the last two minutes, and how strong: a
// ring on a UTC grid.
type track struct {
	at [slots]sensors.Instant
	x, y, strength,
	xx, yy, ss [slots]float64 // and their variances
}

const (
	every = 5 * sensors.Second
	slots = 24
	// shared: a step's estimate rests on the means of about 54 s, so a dozen
	// neighbours on the grid hold the same wind; each counts for that much less.
	shared = 6
	// likelySpeed is the standard deviation of a component of an outflow's motion
	// before anything is seen of it, m/s, and likelyGrowth that of its growth,
	// m/s per s: 10 m/s within five minutes and more (Wilson et al. 1984).
	likelySpeed  = 6.0
	likelyGrowth = 0.05
	// Told is only what is known to so much.
	knownSpeed = 3.5
	// jump: centres farther apart than this between two steps on the grid, m,
	// are not the same outflow.
	jump = 2500
	// restingGrowth is a growth that counts as none, m/s per s.
	restingGrowth = 0.015
)

// remember keeps the estimate if t lies on the grid.
func (k *track) remember(t sensors.Instant, o *Outflow) {
	if t%every != 0 {
		return
	}
	if k.gap(o) > jump {
		*k = track{}
	}
	s := int(t/every) % slots
	k.at[s] = t
	k.x[s], k.y[s], k.strength[s] = o.X, o.Y, o.Strength
	k.xx[s], k.yy[s] = o.Spread[0], o.Spread[2]
	sd := (o.StrengthHigh - o.StrengthLow) / (2 * 1.6449)
	k.ss[s] = math.Max(float64(sd*sd), 0.01)
}

// gap is how far an outflow lies from the newest place of the track, m; 0 for
// a track without any.
func (k *track) gap(o *Outflow) float64 {
	newest := 0
	for s := range k.at {
		if k.at[s] > k.at[newest] {
			newest = s
		}
	}
	if k.at[newest] == 0 {
		return 0
	}
	return math.Hypot(o.X-k.x[newest], o.Y-k.y[newest])
}

// follow fills motion and growth from what the track holds.
func (k *track) follow(t sensors.Instant, o *Outflow) {
	east, sdEast := k.slope(t, &k.x, &k.xx, likelySpeed)
	north, sdNorth := k.slope(t, &k.y, &k.yy, likelySpeed)
	o.Motion = Motion{East: east, North: north, Spread: math.Max(sdEast, sdNorth)}
	o.Motion.Known = o.Motion.Spread <= knownSpeed
	o.Growth, o.GrowthSpread = k.slope(t, &k.strength, &k.ss, likelyGrowth)
	switch {
	case o.GrowthSpread > likelyGrowth*0.6 || math.Abs(o.Growth) > restingGrowth && math.Abs(o.Growth) < o.GrowthSpread:
		o.Trend = TrendUnknown
	case o.Growth > restingGrowth:
		o.Trend = Growing
	case o.Growth < -restingGrowth:
		o.Trend = Fading
	default:
		o.Trend = Steady
	}
}

// slope is the rate of change of a value and its standard deviation: weighted
// least squares on a line through the values of the last two minutes, with the
// prior N(0, likely) on the rate.
func (k *track) slope(t sensors.Instant, value, variance *[slots]float64, likely float64) (rate, sd float64) {
	var a, b, c, az, bz float64
	c = 1 / float64(likely*likely)
	newest := t - t%every
	for i := slots - 1; i >= 0; i-- { // oldest first, so that the sums do not depend on where the ring began
		at := newest - sensors.Instant(i)*every
		s := int(at/every) % slots
		if at <= 0 || k.at[s] != at {
			continue
		}
		w := 1 / float64(variance[s]*shared)
		dt := at.Sub(t).Seconds()
		a += w
		b += float64(w * dt)
		c += float64(w * dt * dt)
		az += float64(w * value[s])
		bz += float64(w * dt * value[s])
	}
	det := float64(a*c) - float64(b*b)
	if a == 0 || det <= 0 {
		return 0, likely
	}
	return (float64(a*bz) - float64(b*az)) / det, math.Sqrt(a / det)
}

// Looking ahead: farther than this, s, nothing is said.
const (
	lookAhead = 300
	lookEvery = 5
	// behind is how long ago an outflow that moves was where it is found, s: the
	// field rests on means. Measured over outflows of 2 to 11 m/s, two to four
	// minutes after their begin: 6 to 19 s. It makes arrivals 9 s late in the
	// median, not 20 (TestMotionOverSeeds, 96 outflows).
	behind = 13.0
)

// reaches lists the paths that the ring of greatest wind lies on or comes to.
func reaches(paths []Path, o *Outflow, dst []Reach) []Reach {
	for i, p := range paths {
		for s := 0.0; s <= lookAhead; s += lookEvery {
			since := s
			if o.Motion.Known {
				since += behind
			}
			if p.distance(o.X+float64(since*o.Motion.East), o.Y+float64(since*o.Motion.North)) <= o.Radius {
				dst = append(dst, Reach{Path: i, Seconds: s})
				break
			}
			if !o.Motion.Known {
				break // only whether it lies there now
			}
		}
	}
	return dst
}

// distance of a place from the path, m.
func (p Path) distance(x, y float64) float64 {
	dx, dy := p.ToX-p.FromX, p.ToY-p.FromY
	length2 := float64(dx*dx) + float64(dy*dy)
	f := 0.0
	if length2 > 0 {
		f = min(max((float64((x-p.FromX)*dx)+float64((y-p.FromY)*dy))/length2, 0), 1)
	}
	return math.Hypot(x-p.FromX-float64(f*dx), y-p.FromY-float64(f*dy))
}
