package front

import "math"

func sincos(deg float64) (sin, cos float64) { return math.Sincos(deg * (math.Pi / 180)) }

// Passage is one place (m) and when a front passed it (s).
type Passage struct{ X, Y, T, SD float64 }

// Plane is a straight front that moves evenly: it passes x, y at
// T0 + SX x + SY y. The slowness (SX, SY), s/m, points the way it moves and is
// one over its speed.
type Plane struct {
	T0, SX, SY float64
	N          int
	// Deviation is the residual standard deviation in s, of N-3 degrees of
	// freedom; 0 for three passages. The covariance of T0, SX and SY is
	// Deviation squared times the inverse of X'X, of which the lower block is
	// kept.
	Deviation     float64
	cxx, cxy, cyy float64
	// Wide and Narrow are the standard deviations of the places along the line
	// that fits them best and across it, m.
	Wide, Narrow float64
	// AlongEast, AlongNorth is the unit vector of that line.
	AlongEast, AlongNorth float64
}

// Fit fits a plane front to the passages by least squares, each weighted by
// 1/SD2 (an SD of 0 counts as 1): t_i = t0 + s . p_i, speed 1/|s|, moving
// toward atan2(sx, sy). It says no where fewer than three are given or all
// stand on one line.
func Fit(ps []Passage) (Plane, bool) {
	p := Plane{N: len(ps)}
	var sum, x, y, t float64
	for _, q := range ps {
		w := weight(q)
		sum += w
		x += float64(w * q.X)
		y += float64(w * q.Y)
		t += float64(w * q.T)
	}
	if p.N == 0 {
		return p, false
	}
	x, y, t = x/sum, y/sum, t/sum
	var xx, xy, yy, xt, yt, tt float64
	for _, q := range ps {
		w, dx, dy, dt := weight(q), q.X-x, q.Y-y, q.T-t
		xx += float64(w * float64(dx*dx))
		xy += float64(w * float64(dx*dy))
		yy += float64(w * float64(dy*dy))
		xt += float64(w * float64(dx*dt))
		yt += float64(w * float64(dy*dt))
		tt += float64(w * float64(dt*dt))
	}
	p.shape(xx/sum, xy/sum, yy/sum)
	det := float64(xx*yy) - float64(xy*xy)
	if p.N < 3 || p.Narrow < 1e-6*p.Wide || det <= 0 {
		return p, false
	}
	p.SX = (float64(yy*xt) - float64(xy*yt)) / det
	p.SY = (float64(xx*yt) - float64(xy*xt)) / det
	p.T0 = t - float64(p.SX*x) - float64(p.SY*y)
	p.cxx, p.cxy, p.cyy = yy/det, -xy/det, xx/det
	if p.N > 3 {
		ssr := tt - float64(p.SX*xt) - float64(p.SY*yt)
		p.Deviation = math.Sqrt(max(ssr, 0) / float64(p.N-3))
	}
	return p, true
}

func weight(q Passage) float64 {
	if q.SD <= 0 {
		return 1
	}
	return 1 / float64(q.SD*q.SD)
}

// shape fills the axes of the places from their covariance.
func (p *Plane) shape(xx, xy, yy float64) {
	half, diff := float64((xx+yy)/2), (xx-yy)/2
	root := math.Hypot(diff, xy)
	p.Wide, p.Narrow = math.Sqrt(max(half+root, 0)), math.Sqrt(max(half-root, 0))
	angle := math.Atan2(xy, diff) / 2 // of the long axis, from east
	p.AlongNorth, p.AlongEast = math.Sincos(angle)
}

// Speed of the front, m/s; +Inf if it passed everywhere at once.
func (p *Plane) Speed() float64 { return 1 / math.Hypot(p.SX, p.SY) }

// Toward is where it moves to, degrees true in [0, 360).
func (p *Plane) Toward() float64 {
	deg := float64(math.Atan2(p.SX, p.SY) * (180 / math.Pi))
	if deg < 0 {
		deg += 360
	}
	return deg
}

// Errors are the standard errors of the speed (m/s) and of the direction
// (degrees), to first order: sd(c) = c2 s_t sqrt(n'Cn), sd(dir) = s_t
// sqrt(m'Cm)/|s|, n along the motion and m across it.
func (p *Plane) Errors() (speed, toward float64) {
	c := p.Speed()
	e, n := p.SX*c, p.SY*c
	along := float64(p.cxx*float64(e*e)) + 2*float64(p.cxy*float64(e*n)) + float64(p.cyy*float64(n*n))
	across := float64(p.cxx*float64(n*n)) - 2*float64(p.cxy*float64(e*n)) + float64(p.cyy*float64(e*e))
	return c * c * p.Deviation * math.Sqrt(along), p.Deviation * math.Sqrt(across) * c * (180 / math.Pi)
}

// At is when the front passes a place, s.
func (p *Plane) At(x, y float64) float64 { return p.T0 + float64(p.SX*x) + float64(p.SY*y) }

// Bounds of the speed of a front over the ground, m/s. Colorado's moved with
// 8.6 on average (W.P. Mahoney, "Gust front characteristics and the kinematics
// associated with interacting thunderstorm outflows", Mon. Wea. Rev. 116, 1988).
const (
	slowest = 3.0
	fastest = 30.0
)

// Tests of a plane.
const (
	leastNarrow = 150.0 // m: places narrower than this stand in a line
	mostScatter = 0.2   // of the time that the front takes across the places
	freeScatter = 20.0  // s of residual that edges of real fronts may have anyway
)

// Apparent is the slowness along the line that fits the places best, s/m, by
// least squares; what a front does across that line stays unknown.
func (p *Plane) apparent(ps []Passage) float64 {
	var sum, s, t, ss, st float64
	for _, q := range ps {
		w := weight(q)
		along := float64(q.X*p.AlongEast) + float64(q.Y*p.AlongNorth)
		sum += w
		s += float64(w * along)
		t += float64(w * q.T)
	}
	s, t = s/sum, t/sum
	for _, q := range ps {
		along := float64(q.X*p.AlongEast) + float64(q.Y*p.AlongNorth) - s
		ss += float64(weight(q) * float64(along*along))
		st += float64(weight(q) * float64(along*(q.T-t)))
	}
	if ss == 0 {
		return 0
	}
	return st / ss
}

// aligned tells whether the places stand in a line, so that only the speed
// along it can be measured.
func (p *Plane) aligned() bool { return p.N < 3 || p.Narrow < leastNarrow }

// scattered tells whether the times are too uneven for one straight front: the
// residual exceeds a fifth of the time that the front takes over the places.
func (p *Plane) scattered() bool {
	if p.N < 4 || p.aligned() {
		return false
	}
	across := 2 * p.Wide * math.Hypot(p.SX, p.SY)
	return p.Deviation > max(freeScatter, mostScatter*across)
}
