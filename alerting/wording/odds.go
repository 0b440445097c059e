package wording

import (
	"math"
	"strconv"
)

// The ends of what is said of a probability, in 100. A prior that was made
// without ever having seen every kind of weather does not know the rare ones
// to a few in 100, however certain a computed 0.9996 looks.
const (
	leastOdds    = 5
	greatestOdds = 95
)

// Odds is a probability in words: "80 in 100", and at the ends "under 5 in
// 100" and "over 95 in 100". Numbers in objects stay as they were computed.
func Odds(p float64) string {
	switch of := math.Round(p * 100); {
	case math.IsNaN(of):
		return "an unknown number in 100"
	case of > greatestOdds:
		return "over " + strconv.Itoa(greatestOdds) + " in 100"
	case of < leastOdds:
		return "under " + strconv.Itoa(leastOdds) + " in 100"
	default:
		return strconv.Itoa(int(of)) + " in 100"
	}
}
