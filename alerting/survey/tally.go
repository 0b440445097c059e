package survey

import (
	"slices"

	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
)

// tally sums records up.
type tally struct {
	network  *Network
	plan     Plan
	episodes []*Episode // in order
	places   []Place
	large    float64 // kt
}

// Tally sums up what was found: records in any order. A survey whose records
// are not all there is marked as partial. accepted is how many false openings in
// 100 path-hours an operator would put up with.
func Tally(n *Network, p Plan, records []Record, accepted float64) *Findings {
	t := &tally{network: n, plan: p, large: quantity.Knots(n.Settings.Levels.Large)}
	for _, r := range records {
		if r.Episode != nil {
			t.episodes = append(t.episodes, r.Episode)
		}
		if r.Place != nil {
			t.places = append(t.places, *r.Place)
		}
	}
	slices.SortFunc(t.episodes, func(a, b *Episode) int { return a.Index - b.Index })
	slices.SortFunc(t.places, func(a, b Place) int { return a.Index - b.Index })
	f := &Findings{
		Network: n.Name, Airfield: n.Settings.Airfield.ID, Masts: len(n.Specs), Grounds: len(grounds(n)),
		Seed: p.Seed, Tuning: p.tuning(), WindyOnly: p.Windy, Planned: p.Episodes, Episodes: len(t.episodes),
		Partial: len(records) < p.Tasks(n), Large: round(t.large, 10), Confidence: n.Settings.Levels.Confidence,
	}
	for _, e := range t.episodes {
		if e.Fault != "" {
			f.Faulty++
		}
	}
	t.detect(f)
	t.delays(f)
	t.falsely(f)
	t.cover(f)
	t.estimates(f)
	t.choices(f, accepted)
	f.Ground = t.ground()
	return f
}

// share is the share of found cases among those that belong.
func (t *tally) share(belongs func(*Episode, *Case) bool) Share {
	clusters := make([]cluster, 0, len(t.episodes))
	for _, e := range t.episodes {
		clusters = append(clusters, clusterOf(e, belongs))
	}
	return shareOf(clusters)
}

// classes of a value between bounds; the last class has no upper end when open.
func (t *tally) classes(bounds []float64, open bool, value func(*Case) (float64, bool), belongs func(*Episode, *Case) bool) []ClassShare {
	var out []ClassShare
	for i, from := range bounds {
		to := 0.0
		if i+1 < len(bounds) {
			to = bounds[i+1]
		} else if !open {
			break
		}
		s := t.share(func(e *Episode, c *Case) bool {
			v, ok := value(c)
			return ok && belongs(e, c) && v >= from && (v < to || to == 0 && i+1 == len(bounds))
		})
		out = append(out, ClassShare{From: from, To: to, Share: s})
	}
	return out
}

// strong is the change that must be found: a third above the level in force.
func (t *tally) strong() float64 { return t.large * 4 / 3 }

func (t *tally) isStrongLoss(_ *Episode, c *Case) bool { return !c.Gain && c.Peak >= t.strong() }

func (t *tally) detect(f *Findings) {
	steps := []float64{10, 15, 20, 25, 30, 35, 40}
	peak := func(c *Case) (float64, bool) { return c.Peak, true }
	whole := func(c *Case) (float64, bool) { return c.PeakAll, true }
	loss := func(_ *Episode, c *Case) bool { return !c.Gain }
	f.Detection = t.classes(steps, true, peak, loss)
	f.Gains = t.classes(steps, true, peak, func(_ *Episode, c *Case) bool { return c.Gain })
	f.Whole = t.classes(steps, true, whole, loss)
	where := func(test func(*Episode) bool) Share {
		return t.share(func(e *Episode, c *Case) bool { return test(e) && t.isStrongLoss(e, c) })
	}
	f.Strong = where(func(*Episode) bool { return true })
	f.Calm = where(func(e *Episode) bool { return e.Eddies == 0 })
	f.Eddying = where(func(e *Episode) bool { return e.Eddies > 0 })
	f.Sound = where(func(e *Episode) bool { return e.Fault == "" })
	f.Broken = where(func(e *Episode) bool { return e.Fault != "" })
	for _, m := range []synthetic.Model{synthetic.ModelOsegueraBowles, synthetic.ModelVicroy, synthetic.ModelHolmesOliver} {
		for _, stretched := range []bool{false, true} {
			name := string(m) + ", round"
			if stretched {
				name = string(m) + ", stretched"
			}
			f.Shapes = append(f.Shapes, NamedShare{name, where(func(e *Episode) bool {
				return e.Model == string(m) && (e.Stretch > 1) == stretched
			})})
		}
	}
	f.Shapes = append(f.Shapes, NamedShare{"gust fronts", where(func(e *Episode) bool { return e.Kind == synthetic.StudyFront })})
	// By place, everything that was strong enough on the whole path counts: what
	// comes down where nothing is observed is missed.
	strong := func(e *Episode, c *Case) bool { return !c.Gain && c.PeakAll >= t.strong() }
	f.StrongWhole = t.share(strong)
	along := func(c *Case) (float64, bool) {
		if c.Along == nil {
			return 0, false
		}
		return *c.Along, true
	}
	beside := func(c *Case) (float64, bool) {
		if c.Beside == nil {
			return 0, false
		}
		return *c.Beside, true
	}
	f.Along = t.classes([]float64{-6000, -4000, -3000, -2000, -1000, 0, 1000, 2000, 3000, 4000, 5000, 6000}, false, along, strong)
	f.Beside = t.classes([]float64{-2000, -1000, -500, 0, 500, 1000, 2000}, false, beside, strong)
}

// delays of the engine, and of the test that knows size and place.
func (t *tally) delays(f *Findings) {
	var own, same, known []float64
	limit := t.limit()
	step := min(int(limit/zStep), zCount-1)
	f.Reference.Limit = limit
	for _, e := range t.episodes {
		for i := range e.Cases {
			c := &e.Cases[i]
			if c.Gain || c.Peak < t.strong() || c.Passed == 0 {
				continue
			}
			f.Delay.Cases++
			if c.Opened == 0 {
				f.Delay.Missed++
			} else {
				own = append(own, float64(c.Opened-c.Passed))
			}
			if !c.Knows || e.Kind != synthetic.StudyOutflow {
				continue
			}
			f.Same.Cases++
			f.Reference.Cases++
			if c.Opened == 0 {
				f.Same.Missed++
			} else {
				same = append(same, float64(c.Opened-c.Passed))
			}
			if first := c.First[step]; first == 0 {
				f.Reference.Missed++
			} else {
				known = append(known, float64(first-c.Passed))
			}
		}
	}
	for _, d := range []struct {
		to  *Delay
		all []float64
	}{{&f.Delay, own}, {&f.Same, same}, {&f.Reference, known}} {
		slices.Sort(d.all)
		d.to.Median, d.to.P90 = percentile(d.all, 0.5), percentile(d.all, 0.9)
	}
}

// limit is z at which the test that knows size and place opens falsely on no
// more paths of windy episodes than the engine does, and never below 0: there
// its estimate itself lies under the level.
func (t *tally) limit() float64 {
	var tops []float64
	falsely := 0
	for _, e := range t.episodes {
		for i := range e.Cases {
			if c := &e.Cases[i]; windy(e.Kind) && c.Knows {
				tops = append(tops, c.Top)
				if c.False > 0 {
					falsely++
				}
			}
		}
	}
	slices.Sort(tops)
	for k := range zCount {
		limit := float64(k) * zStep
		first, _ := slices.BinarySearch(tops, limit)
		if len(tops)-first <= falsely {
			return limit
		}
	}
	return (zCount - 1) * zStep
}

// falsely counts the openings of level 2 or more while the true change was small.
func (t *tally) falsely(f *Findings) {
	for _, eddies := range []bool{false, true} {
		f.False = append(f.False, t.byWind(eddies, func(e *Episode) bool { return (e.Eddies > 0) == eddies })...)
	}
	f.ByWind = t.byWind(true, func(*Episode) bool { return true })
	every := func(*Case) bool { return true }
	for _, kind := range synthetic.StudyFaults() {
		r := t.rate(func(e *Episode) bool { return windy(e.Kind) && e.Fault == string(kind) }, every)
		f.Faults = append(f.Faults, FaultRate{Fault: kind, Rate: r})
	}
	f.Windy = t.rate(func(e *Episode) bool { return windy(e.Kind) }, every)
}

// byWind counts them by the mean wind, where all instruments are sound.
func (t *tally) byWind(eddies bool, counts func(*Episode) bool) (all []WindRate) {
	for from := 0.0; from < 15; from += 5 {
		w := WindRate{From: from, To: from + 5, Eddies: eddies}
		if w.To == 15 {
			w.To = 15.5 // 30 kt
		}
		belongs := func(e *Episode) bool {
			return windy(e.Kind) && e.Fault == "" && counts(e) && e.Wind >= w.From && e.Wind < w.To
		}
		w.Loss = t.rate(belongs, func(c *Case) bool { return !c.Gain })
		w.Gain = t.rate(belongs, func(c *Case) bool { return c.Gain })
		w.Both = t.rate(belongs, func(*Case) bool { return true })
		all = append(all, w)
	}
	return all
}

// rate counts openings on some cases of some episodes over their path-hours: a
// loss and a gain of one path share its hours.
func (t *tally) rate(belongs func(*Episode) bool, counts func(*Case) bool) Rate {
	var all []exposure
	for _, e := range t.episodes {
		if !belongs(e) {
			continue
		}
		x := exposure{hours: e.Hours * float64(len(e.Cases)) / 2}
		for i := range e.Cases {
			if counts(&e.Cases[i]) {
				x.events += e.Cases[i].False
			}
		}
		all = append(all, x)
	}
	return rateOf(all, t.plan.Seed)
}

// cover sums up how far what was told of losses could be relied on.
func (t *tally) cover(f *Findings) {
	f.Coverage = t.coverage(func(c *Case) [][3]int { return c.Steps })
	f.Told = t.coverage(func(c *Case) [][3]int { return c.Told })
	f.Sure, f.Unsure = t.reliability(false), t.reliability(true)
}

// reliability is how often a loss reached the level, by the probability told of
// it, in the episodes with or without a fault.
func (t *tally) reliability(fault bool) (all []ClassShare) {
	const width = 100 / probabilityCount
	for k := range probabilityCount {
		clusters := make([]cluster, 0, len(t.episodes))
		for _, e := range t.episodes {
			if (e.Fault != "") != fault {
				continue
			}
			var c cluster
			for i := range e.Cases {
				if n := e.Cases[i].Sure[k]; !e.Cases[i].Gain {
					c.cases, c.hits = c.cases+n[0], c.hits+n[1]
				}
			}
			clusters = append(clusters, c)
		}
		all = append(all, ClassShare{From: float64(k * width), To: float64((k + 1) * width), Share: shareOf(clusters)})
	}
	return all
}

// coverage sums up the counts of the losses that of gives.
func (t *tally) coverage(of func(*Case) [][3]int) (all []Coverage) {
	classes := changeClasses()
	var sums [len(classes)][3]int
	for _, e := range t.episodes {
		for i := range e.Cases {
			for k, n := range of(&e.Cases[i]) {
				if !e.Cases[i].Gain && k < len(sums) {
					for j := range n {
						sums[k][j] += n[j]
					}
				}
			}
		}
	}
	for k, n := range sums {
		c := Coverage{From: classes[k], Steps: n[0], Inside: ratio(n[1], n[0]), Above: ratio(n[2], n[0]), Below: ratio(n[0]-n[1]-n[2], n[0])}
		if k+1 < len(classes) {
			c.To = classes[k+1]
		}
		all = append(all, c)
	}
	return all
}

// estimates sums up the errors of outflow centres and front arrivals.
func (t *tally) estimates(f *Findings) {
	var centres, arrivals []float64
	for _, e := range t.episodes {
		if c := e.Centre; c != nil && c.Inside {
			f.Centre.Cases++
			if c.Told {
				centres = append(centres, c.Off)
			}
		}
		for _, a := range e.Arrivals {
			f.Arrival.Cases++
			if a.Told {
				arrivals = append(arrivals, max(a.Off, -a.Off))
			}
		}
	}
	for _, o := range []struct {
		to  *Off
		all []float64
	}{{&f.Centre, centres}, {&f.Arrival, arrivals}} {
		slices.Sort(o.all)
		o.to.Told, o.to.Median, o.to.P90 = len(o.all), percentile(o.all, 0.5), percentile(o.all, 0.9)
	}
}

// ground sums the places up.
func (t *tally) ground() *BlindGround {
	if len(t.places) == 0 {
		return nil
	}
	g := &BlindGround{Step: t.plan.GroundStep, Places: t.places}
	for _, p := range t.places {
		i := slices.IndexFunc(g.Counts, func(c GroundCount) bool { return c.Strength == p.Strength && c.Radius == p.Radius })
		if i < 0 {
			g.Counts = append(g.Counts, GroundCount{Strength: p.Strength, Radius: p.Radius})
			i = len(g.Counts) - 1
		}
		c := &g.Counts[i]
		switch p.Seen(t.large) {
		case SeenWell:
			c.Seen++
		case Unseen:
			c.Unseen++
		case Outside:
			c.Outside++
		case Harmless:
			c.Harmless++
		}
	}
	return g
}
