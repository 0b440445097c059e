package survey

import (
	"math"
	"math/rand/v2"
	"slices"

	"sockline/alerting/contingency"
	"sockline/sensors/quantity"
)

// choices works out what every combination of level and confidence would have
// found and opened falsely, and which of those that open falsely no more often
// than is accepted finds most.
func (t *tally) choices(f *Findings, accepted float64) {
	for level := leastLevel; level < leastLevel+levelCount; level++ {
		for c, confidence := range confidences() {
			f.Sweep = append(f.Sweep, t.choice(level, c, confidence))
		}
	}
	for i := range f.Sweep {
		c := &f.Sweep[i]
		c.InForce = math.Abs(float64(c.Level)-t.large) < 0.5 && math.Abs(c.Confidence-t.network.Settings.Levels.Confidence) < 1e-6
		if c.Detection.Cases == 0 || c.False.Cases == 0 || c.Per100High > accepted {
			continue
		}
		better := f.Chosen == nil || c.Detection.Hits > f.Chosen.Detection.Hits ||
			c.Detection.Hits == f.Chosen.Detection.Hits && c.Per100 < f.Chosen.Per100
		if better {
			chosen := *c
			f.Chosen = &chosen
		}
	}
}

// choice sums one combination up. Losses and gains both count: the level is one
// for both.
func (t *tally) choice(level, c int, confidence float64) Choice {
	out := Choice{Level: level, Confidence: confidence}
	var found, falsely []cluster
	openings, hours := 0, 0.0
	var table contingency.Table
	for _, e := range t.episodes {
		var strong, calm cluster
		counts := windy(e.Kind) && e.Fault == ""
		for i := range e.Cases {
			k := &e.Cases[i]
			n := openingsAt(k.Cells, c, level)
			hit := foundAt(k.Found, c, level)
			if k.Peak >= t.strong() {
				strong.count(hit)
				table.Count(true, hit)
			}
			if counts {
				openings += n
				calm.count(n > 0)
				table.Count(false, n > 0)
			}
		}
		if counts {
			hours += e.Hours * float64(len(e.Cases)) / 2
		}
		found, falsely = append(found, strong), append(falsely, calm)
	}
	out.Detection, out.False = shareOf(found), shareOf(falsely)
	scores := table.Scores()
	if scores.CSI.Of > 0 {
		out.Success = *scores.CSI.Value
	}
	if scores.PSS != nil {
		out.Peirce = *scores.PSS
	}
	if hours > 0 {
		out.Per100 = 100 * float64(openings) / hours
		// The interval of the share of paths, at the openings that one of them has.
		each := 1.0
		if out.False.Hits > 0 {
			each = float64(openings) / float64(out.False.Hits)
		}
		out.Per100High = 100 * out.False.High * float64(out.False.Cases) * each / hours
	}
	return out
}

func openingsAt(cells []Cell, c, level int) int {
	for _, k := range cells {
		if k.Confidence == c && k.Level == level {
			return k.Openings
		}
	}
	return 0
}

// Compare sets two networks side by side over the episodes that both have
// played. The change that counts is that on whole paths: what is observed
// differs between them, the weather does not.
func Compare(first, second *Network, p Plan, a, b []Record) Comparison {
	ta := &tally{network: first, plan: p, large: 0}
	tb := &tally{network: second, plan: p, large: 0}
	byIndex := map[int]*Episode{}
	for _, r := range b {
		if r.Episode != nil {
			byIndex[r.Episode.Index] = r.Episode
		}
	}
	for _, r := range a {
		if r.Episode != nil && byIndex[r.Episode.Index] != nil {
			ta.episodes = append(ta.episodes, r.Episode)
		}
	}
	slices.SortFunc(ta.episodes, func(x, y *Episode) int { return x.Index - y.Index })
	for _, e := range ta.episodes {
		tb.episodes = append(tb.episodes, byIndex[e.Index])
	}
	limit := quantity.Knots(first.Settings.Levels.Large) * 4 / 3
	strong := func(_ *Episode, c *Case) bool { return !c.Gain && c.PeakAll >= limit }
	var out Comparison
	out.First, out.Second = ta.share(strong), tb.share(strong)
	out.Gain = out.Second.Share - out.First.Share
	pairs := make([][2]cluster, len(ta.episodes))
	for i := range pairs {
		pairs[i] = [2]cluster{clusterOf(ta.episodes[i], strong), clusterOf(tb.episodes[i], strong)}
	}
	pairs = slices.DeleteFunc(pairs, func(c [2]cluster) bool { return c[0].cases+c[1].cases == 0 })
	out.Low, out.High = differenceInterval(pairs, p.Seed)
	calm := func(e *Episode) bool { return windy(e.Kind) }
	all := func(*Case) bool { return true }
	out.FalseFirst, out.FalseSecond = ta.rate(calm, all), tb.rate(calm, all)
	return out
}

func clusterOf(e *Episode, belongs func(*Episode, *Case) bool) (c cluster) {
	for i := range e.Cases {
		if k := &e.Cases[i]; belongs(e, k) {
			c.count(k.Opened > 0)
		}
	}
	return c
}

// differenceInterval is the 95 % interval of the second share less the first,
// from pairs drawn anew: the two met the same weather.
func differenceInterval(pairs [][2]cluster, seed uint64) (low, high float64) {
	if len(pairs) == 0 {
		return 0, 0
	}
	rng := rand.New(rand.NewPCG(seed, 0x70616972))
	all := make([]float64, bootstraps)
	for b := range all {
		var sum [2]cluster
		for range pairs {
			p := pairs[rng.IntN(len(pairs))]
			for k := range sum {
				sum[k].hits, sum[k].cases = sum[k].hits+p[k].hits, sum[k].cases+p[k].cases
			}
		}
		all[b] = ratio(sum[1].hits, sum[1].cases) - ratio(sum[0].hits, sum[0].cases)
	}
	slices.Sort(all)
	return all[bootstraps*25/1000], all[bootstraps*975/1000-1]
}
