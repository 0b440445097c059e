package survey

import (
	"math/rand/v2"
	"slices"

	"sockline/alerting/contingency"
)

// Share is a share of cases with its 95 % interval.
type Share struct {
	Hits  int     `json:"hits"`
	Cases int     `json:"cases"`
	Share float64 `json:"share"`
	Low   float64 `json:"low"`
	High  float64 `json:"high"`
}

// cluster is the cases of one episode: they share its weather, so they are not
// as many as they seem.
type cluster struct{ hits, cases int }

func (c *cluster) count(hit bool) {
	c.cases++
	if hit {
		c.hits++
	}
}

// shareOf is the share of all cases with Wilson's interval for the number of
// cases divided by the design effect of the clusters (L. Kish, "Survey
// Sampling", 1965: the variance of a ratio of cluster totals over that of as
// many independent cases; from memory). Where all or none are hits nothing can
// be learnt of it, and each cluster counts as one case.
func shareOf(clusters []cluster) Share {
	var s Share
	used := 0
	for _, c := range clusters {
		s.Hits, s.Cases = s.Hits+c.hits, s.Cases+c.cases
		if c.cases > 0 {
			used++
		}
	}
	if s.Cases == 0 {
		s.High = 1
		return s
	}
	n := float64(s.Cases)
	s.Share = float64(s.Hits) / n
	effective := float64(used)
	if s.Hits > 0 && s.Hits < s.Cases && used > 1 {
		sum := 0.0
		for _, c := range clusters {
			d := float64(c.hits) - float64(s.Share*float64(c.cases))
			sum += float64(d * d)
		}
		variance := sum / (n * n) * float64(used) / float64(used-1)
		effect := max(variance/(s.Share*(1-s.Share)/n), 1)
		effective = n / effect
	}
	s.Low, s.High = contingency.Wilson(s.Share, effective)
	return s
}

// Rate is a number of events in an exposure, per 100 hours of it, with its
// 95 % interval.
type Rate struct {
	Events int     `json:"events"`
	Hours  float64 `json:"path_hours"`
	Per100 float64 `json:"per_100_hours"`
	Low    float64 `json:"low"`
	High   float64 `json:"high"`
}

// exposure is the events and hours of one episode.
type exposure struct {
	events int
	hours  float64
}

// bootstraps is how often the episodes are drawn anew.
const bootstraps = 1000

// rateOf is the rate with an interval from episodes drawn anew with replacement
// (B. Efron, "Bootstrap methods: another look at the jackknife", Ann. Statist.
// 7, 1979): openings of one episode belong together. Where nothing happened
// the bootstrap says nothing, and the upper limit is that of no event in so many
// hours, 3.69 of them (the exact Poisson limit at 97.5 %: F. Garwood, Biometrika
// 28, 1936; from memory); no upper limit is ever below it.
func rateOf(all []exposure, seed uint64) Rate {
	var r Rate
	for _, e := range all {
		r.Events, r.Hours = r.Events+e.events, r.Hours+e.hours
	}
	if r.Hours == 0 {
		return r
	}
	r.Per100 = 100 * float64(r.Events) / r.Hours
	nothing := 100 * 3.6889 / r.Hours
	rng := rand.New(rand.NewPCG(seed, 0x626f6f74))
	rates := make([]float64, bootstraps)
	for b := range rates {
		events, hours := 0, 0.0
		for range all {
			e := all[rng.IntN(len(all))]
			events, hours = events+e.events, hours+e.hours
		}
		rates[b] = 100 * float64(events) / hours
	}
	slices.Sort(rates)
	r.Low, r.High = rates[bootstraps*25/1000], max(rates[bootstraps*975/1000-1], nothing)
	return r
}

func ratio(a, b int) float64 {
	if b == 0 {
		return 0
	}
	return float64(a) / float64(b)
}

// percentile of sorted values, 0 to 1; 0 for none.
func percentile(sorted []float64, p float64) float64 {
	if len(sorted) == 0 {
		return 0
	}
	return sorted[min(int(p*float64(len(sorted))), len(sorted)-1)]
}
