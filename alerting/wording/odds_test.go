package wording_test

import (
	"math"
	"testing"

	"sockline/alerting/wording"
)

// Nothing is said to be certain, nor certain not to be.
func TestOdds(t *testing.T) {
	for p, want := range map[float64]string{
		0: "under 5 in 100", 0.01: "under 5 in 100", 0.044: "under 5 in 100", 0.046: "5 in 100",
		0.5: "50 in 100", 0.804: "80 in 100", 0.95: "95 in 100", 0.954: "95 in 100",
		0.956: "over 95 in 100", 0.9996: "over 95 in 100", 1: "over 95 in 100", 1.5: "over 95 in 100",
		math.Inf(1): "over 95 in 100", math.Inf(-1): "under 5 in 100",
	} {
		if got := wording.Odds(p); got != want {
			t.Errorf("%g is %q, not %q", p, got, want)
		}
	}
	if got := wording.Odds(math.NaN()); got != "an unknown number in 100" {
		t.Errorf("NaN is %q", got)
	}
}
