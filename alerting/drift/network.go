package drift

import (
	"errors"
	"math"

	"sockline/sensors/quantity"
)

// Kernel says how alike the wind is at two places: each component varies about
// the network's mean with Variance in m2/s2, alike over Length in m as
// exp(-d^2/(2 Length^2)), and a mast adds Noise in m2/s2 of its own.
type Kernel struct {
	Length, Variance, Noise float64
}

// Observation is a wind at a place, in m and m/s.
type Observation struct {
	X, Y float64
	Wind quantity.Vector
}

// Prediction is what the others say of the wind at a place.
type Prediction struct {
	Wind      quantity.Vector // m/s
	Deviation float64         // of each component of the wind there, without a mast's noise, m/s
}

// errTooFew says that there is nobody to compare with.
var errTooFew = errors.New("compare masts with their neighbours: it takes three at least")

// gross is the deviation, in standard deviations of what the others say, from
// which on an observation is called a gross error. In a day of hourly reports
// of 300 stations, the three errors of a report stood at 9 and above, the wind
// on a mountain top at 7.3 and below, a sea breeze at 6.3.
const gross = 8.0

// Gross says whether an observation cannot be the wind, judged by what the
// others say: a buddy check. It is for reports of a whole region; an outflow
// over an airfield has no such buddies and must not be judged by it.
func (k Kernel) Gross(o Observation, p Prediction) bool { return k.Score(o, p) >= gross }

// Score is how far an observation is from what the others say, in standard
// deviations.
func (k Kernel) Score(o Observation, p Prediction) float64 {
	d := math.Hypot(o.Wind.East-p.Wind.East, o.Wind.North-p.Wind.North)
	return d / math.Sqrt(float64(p.Deviation*p.Deviation)+k.Noise)
}

// LeaveOneOut is what the others say of each observation: simple kriging about
// the mean of the others. One factor serves all: with K the covariance of all
// and y their differences from a mean, the one left out is missed by
// [K^-1 y]_i / [K^-1]_ii (O. Dubrule, "Cross validation of kriging in a unique
// neighborhood", Math. Geology 15, 1983; from memory), with the variance
// 1 / [K^-1]_ii. The error says that there are too few, or that the kernel is
// not positive.
func (k Kernel) LeaveOneOut(all []Observation) ([]Prediction, error) {
	n := len(all)
	if n < 3 {
		return nil, errTooFew
	}
	if !(k.Length > 0 && k.Variance > 0 && k.Noise > 0) {
		return nil, errors.New("compare masts with their neighbours: length, variance and noise must be positive")
	}
	inverse := k.inverse(all)
	var sum quantity.Vector
	for _, o := range all {
		sum.East += o.Wind.East
		sum.North += o.Wind.North
	}
	out := make([]Prediction, n)
	for i, o := range all {
		mean := quantity.Vector{
			East: (sum.East - o.Wind.East) / float64(n-1), North: (sum.North - o.Wind.North) / float64(n-1),
		}
		var miss quantity.Vector
		for j, w := range all {
			miss.East += float64(inverse[i][j] * (w.Wind.East - mean.East))
			miss.North += float64(inverse[i][j] * (w.Wind.North - mean.North))
		}
		variance := 1 / inverse[i][i]
		out[i] = Prediction{
			Wind:      quantity.Vector{East: o.Wind.East - float64(miss.East*variance), North: o.Wind.North - float64(miss.North*variance)},
			Deviation: math.Sqrt(math.Max(0, variance-k.Noise)),
		}
	}
	return out, nil
}

// inverse is that of the covariance of the observations. The noise on its
// diagonal makes it positive.
func (k Kernel) inverse(all []Observation) [][]float64 {
	n := len(all)
	factor := make([][]float64, n) // lower, L L' = K
	for i := range n {
		factor[i] = make([]float64, n)
		for j := range i + 1 {
			dx, dy := all[i].X-all[j].X, all[i].Y-all[j].Y
			sum := float64(k.Variance * math.Exp(-(float64(dx*dx)+float64(dy*dy))/(2*k.Length*k.Length)))
			if i == j {
				sum += k.Noise
			}
			for m := range j {
				sum -= float64(factor[i][m] * factor[j][m])
			}
			if i == j {
				factor[i][i] = math.Sqrt(sum)
			} else {
				factor[i][j] = sum / factor[j][j]
			}
		}
	}
	// The columns of L^-1, each as a row, so that K^-1 is made of their products.
	rows := make([][]float64, n)
	for c := range n {
		rows[c] = make([]float64, n)
		for i := c; i < n; i++ {
			sum := 0.0
			if i == c {
				sum = 1
			}
			for m := c; m < i; m++ {
				sum -= float64(factor[i][m] * rows[c][m])
			}
			rows[c][i] = sum / factor[i][i]
		}
	}
	out := make([][]float64, n)
	for i := range n {
		out[i] = make([]float64, n)
		for j := range i + 1 {
			for m := i; m < n; m++ {
				out[i][j] += float64(rows[i][m] * rows[j][m])
			}
			out[j][i] = out[i][j]
		}
	}
	return out
}
