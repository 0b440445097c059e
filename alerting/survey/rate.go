package survey

import (
	"math"
	"math/rand/v2"
	"slices"
)

// Share is a share of cases with its 95 % interval.
type Share struct {
	Hits  int     `json:"hits"`
	Cases int     `json:"cases"`
	Share float64 `json:"share"`
	Low   float64 `json:"low"`
	High  float64 `json:"high"`
}

// z95 is the two-sided 95 % point of the normal distribution.
const z95 = 1.959964

// wilson is the score interval of a share at 95 %: E.B. Wilson, "Probable
// inference, the law of succession, and statistical inference", J. Am. Stat.
// Assoc. 22, 1927, 209-212. n may be an effective number. (0, 1) for no cases.
func wilson(share, n float64) (low, high float64) {
	if n <= 0 {
		return 0, 1
	}
	centre := (share + z95*z95/(2*n)) / (1 + z95*z95/n)
	half := z95 / (1 + z95*z95/n) * math.Sqrt(share*(1-share)/n+z95*z95/(4*n*n))
	return max(centre-half, 0), min(centre+half, 1)
}

// cluster is the cases of one episode: they share its weather, so they are not
// as many as they seem.
type cluster struct{ hits, cases int }

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
			d := float64(c.hits) - s.Share*float64(c.cases)
			sum += d * d
		}
		variance := sum / (n * n) * float64(used) / float64(used-1)
		effect := max(variance/(s.Share*(1-s.Share)/n), 1)
		effective = n / effect
	}
	s.Low, s.High = wilson(s.Share, effective)
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

// Scores of a two by two table of what was told against what was.
type Scores struct {
	Hits, FalseAlarms, Misses, Rest int
}

// Detection is the probability of detection, a/(a+c).
func (s Scores) Detection() float64 { return ratio(s.Hits, s.Hits+s.Misses) }

// FalseRatio is the share of what was told that was not, b/(a+b).
func (s Scores) FalseRatio() float64 { return ratio(s.FalseAlarms, s.Hits+s.FalseAlarms) }

// FalseDetection is the share of what was not that was told, b/(b+d).
func (s Scores) FalseDetection() float64 { return ratio(s.FalseAlarms, s.FalseAlarms+s.Rest) }

// Success is the critical success index, a/(a+b+c).
func (s Scores) Success() float64 { return ratio(s.Hits, s.Hits+s.FalseAlarms+s.Misses) }

// Peirce is the difference of Detection and FalseDetection.
func (s Scores) Peirce() float64 { return s.Detection() - s.FalseDetection() }

// Heidke is the share of correct answers beyond chance.
func (s Scores) Heidke() float64 {
	a, b, c, d := float64(s.Hits), float64(s.FalseAlarms), float64(s.Misses), float64(s.Rest)
	den := (a+c)*(c+d) + (a+b)*(b+d)
	if den == 0 {
		return 0
	}
	return 2 * (a*d - b*c) / den
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
