package survey

import (
	"math"
	"math/rand/v2"
	"testing"

	"sockline/alerting/contingency"
)

// Independent cases have Wilson's interval; cases that always go together count
// once.
func TestShareOfClusters(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	single, double := make([]cluster, 4000), make([]cluster, 4000)
	for i := range single {
		hit := 0
		if rng.Float64() < 0.8 {
			hit = 1
		}
		single[i], double[i] = cluster{hit, 1}, cluster{2 * hit, 2}
	}
	s, d := shareOf(single), shareOf(double)
	low, high := contingency.Wilson(s.Share, 4000)
	near(t, "low", s.Low, low, 1e-4)
	near(t, "high", s.High, high, 1e-4)
	near(t, "low of pairs", d.Low, s.Low, 1e-4)
	near(t, "high of pairs", d.High, s.High, 1e-4)
	if d.Cases != 8000 || d.Hits != 2*s.Hits {
		t.Errorf("%d of %d", d.Hits, d.Cases)
	}
	all := shareOf([]cluster{{2, 2}, {2, 2}, {0, 0}})
	if _, h := contingency.Wilson(1, 2); all.Share != 1 || all.High != h {
		t.Errorf("two episodes that hit twice: %+v", all)
	}
	if none := shareOf(nil); none.Cases != 0 || none.High != 1 {
		t.Errorf("no cases: %+v", none)
	}
}

// Expected: the exact limits of a Poisson count (Garwood 1936) for independent
// events: 20 events have 12.22 to 30.89, none has up to 3.689.
func TestRateOfEvents(t *testing.T) {
	all := make([]exposure, 1000)
	for i := range all {
		all[i].hours = 1
		if i%50 == 0 {
			all[i].events = 1
		}
	}
	r := rateOf(all, 5)
	near(t, "rate", r.Per100, 2, 1e-9)
	near(t, "low", r.Low, 1.222, 0.15)
	near(t, "high", r.High, 3.089, 0.3)
	if again := rateOf(all, 5); again != r {
		t.Error("the same seed drew another interval")
	}
	none := rateOf([]exposure{{0, 100}, {0, 100}}, 5)
	near(t, "upper limit of none", none.High, 100*3.6889/200, 1e-3)
	// Events that come together widen the interval.
	for i := range all {
		all[i].events = 0
		if i%250 == 0 {
			all[i].events = 5
		}
	}
	if w := rateOf(all, 5); w.High-w.Low < 1.5*(r.High-r.Low) {
		t.Errorf("clustered events: %.2f to %.2f, single ones %.2f to %.2f", w.Low, w.High, r.Low, r.High)
	}
	if r := rateOf(nil, 1); r.Hours != 0 || math.IsNaN(r.Per100) {
		t.Errorf("nothing played: %+v", r)
	}
}
