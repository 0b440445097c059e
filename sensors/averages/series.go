package averages

import (
	"math"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// second is one second of a mast as people's averages need it.
type second struct {
	have      bool
	v         quantity.Vector // mean of its readings, m/s
	speed     float64         // scalar mean, m/s
	raw       float64         // the same as measured
	high, low float64         // greatest and smallest reading, m/s
}

// series is everything that a mast remembers, by age: the second that ends at
// the step has the age 0. It is filled on request.
type series struct {
	at       sensors.Instant
	interval int // seconds between reports, at least 1
	seconds  [memory]second
	// Sums over the ages below the index, for the many means of a search.
	sumE, sumN, sumS [memory + 1]float64
	count            [memory + 1]int
}

func (s *series) fill(m *mast, t sensors.Instant) {
	s.at, s.interval = t, m.interval
	for age := range memory {
		sec := &s.seconds[age]
		*sec = second{}
		if b := m.at(t - sensors.Instant(age)*sensors.Second); b != nil {
			n := float64(b.n)
			*sec = second{have: true, v: quantity.Vector{East: b.east / n, North: b.north / n},
				speed: b.speed / n, raw: b.raw / n, high: b.high, low: b.low}
		}
		s.sumE[age+1], s.sumN[age+1] = s.sumE[age]+sec.v.East, s.sumN[age]+sec.v.North
		s.sumS[age+1], s.count[age+1] = s.sumS[age]+sec.speed, s.count[age]
		if sec.have {
			s.count[age+1]++
		}
	}
}

// full says whether n seconds with data are enough for a stretch: two thirds
// of what the instrument sends in it (I. Zahumensky, "Guidelines on Quality
// Control Procedures for Data from Automatic Weather Stations", WMO CBS/CIMO
// 2004; from memory).
func (s *series) full(n, length int) bool { return n > 0 && 3*n >= 2*max(length/s.interval, 1) }

// mean is the vector mean and the scalar mean over length seconds that begin
// at an age; false if too little of it is there.
func (s *series) mean(age, length int) (v quantity.Vector, speed float64, ok bool) {
	if age < 0 || age+length > memory {
		return v, 0, false
	}
	n := s.count[age+length] - s.count[age]
	if !s.full(n, length) {
		return v, 0, false
	}
	v.East = (s.sumE[age+length] - s.sumE[age]) / float64(n)
	v.North = (s.sumN[age+length] - s.sumN[age]) / float64(n)
	return v, (s.sumS[age+length] - s.sumS[age]) / float64(n), true
}

// instant is the end of the second of an age.
func (s *series) instant(age int) sensors.Instant {
	return s.at - sensors.Instant(age)*sensors.Second
}

// gustSeconds is the averaging time of a gust (WMO-No. 8 and ICAO Annex 3: a
// 3 s running mean). An instrument slower than one report a second gives its
// single reports instead: they are all that is known.
func (s *series) gustSeconds() int {
	if s.interval > 1 {
		return 1
	}
	return 3
}

// running calls see for each running mean of gustSeconds inside the newest
// length seconds, the oldest first, with the age of its last second. All its
// seconds must be there: a gap gives no gust.
func (s *series) running(length int, see func(age int, v quantity.Vector, speed float64)) {
	width := s.gustSeconds()
	for age := min(length, memory) - width; age >= 0; age-- {
		var v quantity.Vector
		speed, whole := 0.0, true
		for k := age + width - 1; k >= age; k-- {
			sec := &s.seconds[k]
			whole = whole && sec.have
			v.East += sec.v.East
			v.North += sec.v.North
			speed += sec.speed
		}
		if whole {
			w := float64(width)
			see(age, quantity.Vector{East: v.East / w, North: v.North / w}, speed/w)
		}
	}
}

// Mean is the wind over one stretch up to the step. Speeds are m/s.
type Mean struct {
	// Present says that at least two thirds of the expected seconds hold data.
	// Without it nothing else is meant.
	Present bool
	Length  int // of the stretch, s
	Seconds int // with data

	Vector quantity.Vector // vector mean
	Speed  float64         // scalar mean
	Raw    float64         // scalar mean as measured, before any correction

	SpeedDeviation     float64 // standard deviation of the speed of a second, n - 1
	DirectionDeviation float64 // Yamartino's, of the direction of a second, degrees
	// Directed is false where the seconds blow from all sides: then no mean
	// direction and no deviation of it means anything.
	Directed bool

	Gust   float64         // greatest 3 s mean inside
	GustAt sensors.Instant // its last second; the first one if several are equal
	Lull   float64         // smallest 3 s mean inside
	Gusts  bool            // there is at least one whole 3 s mean
	Max    float64         // greatest reading
	Min    float64         // smallest reading
}

// sameGust is how close two gusts are that count as equal, m/s: sums of the same
// readings in another order differ in their last bits.
const sameGust = 1e-9

// calmBelow is the speed below which no direction is told, in m/s (ICAO Annex
// 3: 0.5 m/s or 1 kt).
const calmBelow = 0.5

// over works out the mean over the newest length seconds.
func (s *series) over(length int) Mean {
	m := Mean{Length: length}
	var sin, cos float64
	directions := 0
	for age := range min(length, memory) {
		sec := &s.seconds[age]
		if !sec.have {
			continue
		}
		m.Seconds++
		m.Vector.East += sec.v.East
		m.Vector.North += sec.v.North
		m.Speed += sec.speed
		m.Raw += sec.raw
		if m.Seconds == 1 || sec.high > m.Max {
			m.Max = sec.high
		}
		if m.Seconds == 1 || sec.low < m.Min {
			m.Min = sec.low
		}
		if strength := sec.v.Speed(); strength > 0 {
			sin -= sec.v.East / strength
			cos -= sec.v.North / strength
			directions++
		}
	}
	if !s.full(m.Seconds, length) {
		return Mean{Length: length, Seconds: m.Seconds}
	}
	m.Present = true
	n := float64(m.Seconds)
	m.Vector.East /= n
	m.Vector.North /= n
	m.Speed /= n
	m.Raw /= n
	m.SpeedDeviation = s.speedDeviation(length, m.Speed, m.Seconds)
	if directions > 0 {
		k := float64(directions)
		_, m.DirectionDeviation, m.Directed = circular(sin/k, cos/k)
	}
	m.Lull = math.Inf(1)
	s.running(length, func(age int, _ quantity.Vector, speed float64) {
		if !m.Gusts || speed > m.Gust+sameGust {
			m.Gust, m.GustAt = speed, s.instant(age)
		}
		m.Lull = math.Min(m.Lull, speed)
		m.Gusts = true
	})
	if !m.Gusts {
		m.Lull = 0
	}
	return m
}

func (s *series) speedDeviation(length int, mean float64, n int) float64 {
	if n < 2 {
		return 0
	}
	sum := 0.0
	for age := range min(length, memory) {
		if sec := &s.seconds[age]; sec.have {
			d := sec.speed - mean
			sum += float64(d * d)
		}
	}
	return math.Sqrt(sum / float64(n-1))
}
