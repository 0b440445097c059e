package airfield

import (
	"math"
	"slices"
)

// columnWithin is how near in plan (m) anemometers must stand to count as
// levels of one column of air.
const columnWithin = 100.0

// columnApart is how much higher (m) a level must be than the one below it.
const columnApart = 3.0

// standard is the height (m) at which the wind of an aerodrome is measured
// (ICAO Annex 3: 10 m; from memory).
const standard = 10.0

// Columns are the masts that count as one column of air, as indices, the
// lowest first: two or more anemometers no more than 100 m apart in plan, each
// at least 3 m above the one before. They come in the order of their lowest
// masts.
func (a *Airfield) Columns() [][]int {
	order := make([]int, len(a.Masts))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(i, j int) int {
		switch d := a.Masts[i].Height - a.Masts[j].Height; {
		case d < 0:
			return -1
		case d > 0:
			return 1
		}
		return 0
	})
	var columns [][]int
	for _, i := range order {
		m := a.Masts[i]
		joined := false
		for c := range columns {
			foot, top := a.Masts[columns[c][0]], a.Masts[columns[c][len(columns[c])-1]]
			if math.Hypot(m.X-foot.X, m.Y-foot.Y) <= columnWithin && m.Height >= top.Height+columnApart {
				columns[c] = append(columns[c], i)
				joined = true
				break
			}
		}
		if !joined {
			columns = append(columns, []int{i})
		}
	}
	columns = slices.DeleteFunc(columns, func(c []int) bool { return len(c) < 2 })
	slices.SortStableFunc(columns, func(x, y []int) int { return x[0] - y[0] })
	return columns
}

// Aloft tells of each mast whether it stands above another of its column and
// is left out of the horizontal wind: of a column only the level nearest to 10
// m takes part (the lower of two as near). Two levels of one tower would count
// twice, and the greater wind higher up would pass for a change along the
// ground.
func (a *Airfield) Aloft() []bool {
	aloft := make([]bool, len(a.Masts))
	for _, c := range a.Columns() {
		best := c[0]
		for _, i := range c {
			aloft[i] = true
			if math.Abs(a.Masts[i].Height-standard) < math.Abs(a.Masts[best].Height-standard) {
				best = i
			}
		}
		aloft[best] = false
	}
	return aloft
}

// NearestMast is the mast that tells the wind at a place, such as a threshold:
// the nearest one on the ground within so many m of it, -1 if there is none. It
// is the same whether it reports or not: the wind of a runway end must not
// change its source unseen.
func (a *Airfield) NearestMast(p Point, within float64) int {
	aloft := a.Aloft()
	best, least := -1, within
	for i, m := range a.Masts {
		if d := math.Hypot(m.X-p.X, m.Y-p.Y); !aloft[i] && d <= least {
			best, least = i, d
		}
	}
	return best
}
