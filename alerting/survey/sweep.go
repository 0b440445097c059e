package survey

import (
	"math/bits"

	"sockline/alerting/shear"
	"sockline/sensors/quantity"
)

// What is tried besides the levels in force: every whole knot from leastLevel
// on, at each of a few confidences, all in one run. A level L at confidence c
// is met while the (1-c) point of M lies at L or above.
const (
	leastLevel = 8 // kt
	levelCount = 18
)

// confidences are those that are tried.
func confidences() [confidenceCount]float64 { return [...]float64{0.5, 0.6, 0.7, 0.8, 0.9, 0.95} }

// An opening is false when the true change stayed below two thirds of the
// configured large change during the last minute: 10 kt for the usual 15 kt.
// Every combination is measured by the same yardstick.
const (
	falseShare = 2.0 / 3
	recent     = 60 // s
)

// Cell is false openings at one of the combinations that are tried.
type Cell struct {
	Confidence int `json:"c"` // index into the confidences
	Level      int `json:"kt"`
	Openings   int `json:"n"`
}

// sweep judges one ground and side by every combination: open at once, closed
// once the level less the hysteresis has not been met for the hold.
type sweep struct {
	hysteresis float64 // m/s
	hold       int     // s
	open       [confidenceCount][levelCount]bool
	held       [confidenceCount][levelCount]int
	falsely    [confidenceCount][levelCount]int
	found      [confidenceCount]uint32 // by level, one bit each
}

const confidenceCount = 6

// step takes M's distribution at a second; there: the true change of the last
// minute was large enough for an opening not to be false.
func (s *sweep) step(second int, m *shear.Side, there bool) {
	for c, confidence := range confidences() {
		q := quantity.Knots(m.Quantile(1 - confidence))
		// Below the least level with its hysteresis nothing is met.
		most := int(q+quantity.Knots(s.hysteresis)) - leastLevel + 1
		for l := range levelCount {
			level := float64(leastLevel + l)
			open := &s.open[c][l]
			switch {
			case l >= most && !*open:
				continue
			case q >= level && !*open:
				*open, s.held[c][l] = true, second
				if !there {
					s.falsely[c][l]++
				}
			case q >= level-quantity.Knots(s.hysteresis):
				s.held[c][l] = second
			case second-s.held[c][l] >= s.hold:
				*open = false
			}
			if *open && there {
				s.found[c] |= 1 << l
			}
		}
	}
}

// cells are the false openings, those without any left out.
func (s *sweep) cells() (out []Cell) {
	for c := range s.falsely {
		for l, n := range s.falsely[c] {
			if n > 0 {
				out = append(out, Cell{Confidence: c, Level: leastLevel + l, Openings: n})
			}
		}
	}
	return out
}

// foundAt tells whether a combination was open while the change was there.
func foundAt(found []uint32, c, level int) bool {
	l := level - leastLevel
	return c < len(found) && l >= 0 && l < levelCount && bits.OnesCount32(found[c]>>l&1) == 1
}
