//go:build !amd64

package windfield

// columnsFast is for processors whose vectors are not used.
func columnsFast(_, _, _ []float64) bool { return false }
