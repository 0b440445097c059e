//go:build !amd64

package windfield

import "math"

// None of these do anything: they are for processors whose vectors are not used.

func columnsFast(_, _, _ []float64) bool                          { return false }
func columnsFast3(_ []float64, _ int, _, _ []float64, _ int) bool { return false }
func explainFast(_, _, _, _, _ []float64) (fit, best float64, done bool) {
	return 0, 0, false
}
func addProductsFast(_, _, _ []float64) int            { return 0 }
func drawnFast(_, _, _, _, _ []float64, _ float64) int { return 0 }

func exponentials(x []float64) {
	for i, v := range x {
		x[i] = math.Exp(v)
	}
}
