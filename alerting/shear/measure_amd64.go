package shear

import "golang.org/x/sys/cpu"

// measureAVX2 is the greatest fall, the greatest rise and the greatest fall over
// kilometrePoints of four lines of n points, which begin stride numbers apart; n is
// at least four. space holds 4(n + 2 reachPoints) numbers.
//
//go:noescape
func measureAVX2(lines *float64, stride, n int, space, fall, rise, kilometre *float64)

// Its instructions count on as many points in 4 km and in 1 km.
var (
	_ = [1]struct{}{}[reachPoints-20]
	_ = [1]struct{}{}[kilometrePoints-5]
)

// measureFast does what Measure wants of the draws where the processor can do
// several at once; false where it has done nothing. The observed points must be
// targets in a row.
func (s *Stretch) measureFast(draws []float64, targets int) bool {
	if s.first < 0 || len(s.runs) != 1 || !cpu.X86.HasAVX2 {
		return false
	}
	first, n := s.first+s.runs[0].first, s.runs[0].last-s.runs[0].first+1
	if n < atOnce {
		return false
	}
	for d := 0; d < len(s.Loss.joint); d += atOnce {
		_ = draws[(d+atOnce-1)*targets+first+n-1]
		measureAVX2(&draws[d*targets+first], targets, n, &s.space[0], &s.Loss.joint[d], &s.Gain.joint[d], &s.jointKilometre[d])
	}
	return true
}
