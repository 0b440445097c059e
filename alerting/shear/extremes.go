package shear

import (
	"math"

	"sockline/alerting/windfield"
)

// turn is a point of a line that may be the end of its greatest change.
type turn struct {
	at    int
	value float64
}

// run is a row of observed points, first to last.
type run struct{ first, last int }

// lookUp lists what follows from which points are observed.
func (s *Stretch) lookUp() {
	s.runs, s.far, s.km = s.runs[:0], s.far[:0], s.km[:0]
	for i, observed := range s.Observed {
		if !observed {
			continue
		}
		if i > 0 && s.Observed[i-1] {
			s.runs[len(s.runs)-1].last = i
		} else {
			s.runs = append(s.runs, run{i, i})
		}
		if i >= reachPoints && s.Observed[i-reachPoints] {
			s.far = append(s.far, i)
		}
		if i >= kilometrePoints && s.Observed[i-kilometrePoints] {
			s.km = append(s.km, i)
		}
	}
}

// extremes of a line of the stretch: the greatest fall and the greatest rise
// from an observed point to a later one at most reachPoints on.
//
// Of the pair that changes most, either the ends are exactly reachPoints apart,
// or neither could be moved outward to gain: each is then a turning point of the
// line, or stands beside ground that is not observed. A drawn headwind has a
// handful of turning points, so that it pays to pick them out and to compare all
// pairs of them.
//
// None of it branches on what the line does, which cannot be foretold: a branch
// that is guessed wrong costs more than everything else here. So the greatest is
// sought among the bits: those of positive numbers are in the order of the
// numbers, and those of negative ones, as integers, are below all of them.
func (s *Stretch) extremes(line []float64) (fall, rise float64) {
	var most, least int64 // bits of the greatest fall, and of the greatest rise
	for _, j := range s.far {
		d := line[j-reachPoints] - line[j]
		most, least = max(most, bits(d)), max(least, bits(-d))
	}
	turns := s.turnsOf(line)
	oldest := 0
	for k, b := range turns {
		for b.at-turns[oldest].at > reachPoints {
			oldest++
		}
		for _, a := range turns[oldest:k] {
			d := a.value - b.value
			most, least = max(most, bits(d)), max(least, bits(-d))
		}
	}
	return number(most), number(least)
}

func bits(x float64) int64   { return int64(math.Float64bits(x)) }
func number(b int64) float64 { return math.Float64frombits(uint64(b)) }

// turnsOf are the observed points of a line at which it turns, or beside which
// a point is not observed. Where it is level it counts as rising.
func (s *Stretch) turnsOf(line []float64) []turn {
	turns, n := s.turns, 0
	for _, r := range s.runs {
		turns[n] = turn{r.first, line[r.first]}
		n++
		if r.last == r.first {
			continue
		}
		before := bits(line[r.first+1] - line[r.first])
		for i := r.first + 1; i < r.last; i++ {
			v := line[i]
			after := bits(line[i+1] - v)
			turns[n] = turn{i, v}
			n += int(uint64(before^after) >> 63) // 1 where the signs differ: it turns
			before = after
		}
		turns[n] = turn{r.last, line[r.last]}
		n++
	}
	return turns[:n]
}

// kilometre is the greatest fall over 1 km.
func (s *Stretch) kilometre(line []float64) float64 {
	var most int64
	for _, j := range s.km {
		most = max(most, bits(line[j-kilometrePoints]-line[j]))
	}
	return number(most)
}

// sorter puts the draws in ascending order: each into one of as many bins as
// there are draws, by its size, after which nearly all stand where they belong.
// That takes a quarter of the time of a sort that knows nothing of its values.
type sorter struct {
	ends   [windfield.Draws + 1]int
	values [windfield.Draws]float64
}

func (s *sorter) sort(v []float64) {
	low, high := v[0], v[0]
	for _, x := range v {
		low, high = min(low, x), max(high, x)
	}
	if high > low {
		s.spread(v, low, (windfield.Draws-1)/(high-low))
	}
	for i, x := range v {
		k := i
		for ; k > 0 && v[k-1] > x; k-- {
			v[k] = v[k-1]
		}
		v[k] = x
	}
}

// spread puts the values into bins, counted from low with scale bins for 1 m/s.
func (s *sorter) spread(v []float64, low, scale float64) {
	bin := func(x float64) int { return min(max(int((x-low)*scale), 0), windfield.Draws-1) }
	clear(s.ends[:])
	for _, x := range v {
		s.ends[bin(x)+1]++
	}
	for k := 1; k < len(s.ends); k++ {
		s.ends[k] += s.ends[k-1]
	}
	for _, x := range v {
		k := bin(x)
		s.values[s.ends[k]] = x
		s.ends[k]++
	}
	copy(v, s.values[:])
}
