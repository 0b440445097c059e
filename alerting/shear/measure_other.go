//go:build !amd64

package shear

// measureFast is for processors whose vectors are not used.
func (s *Stretch) measureFast([]float64, int) bool { return false }
