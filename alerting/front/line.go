package front

import (
	"math"

	"sockline/sensors/quantity"
)

// The lines that are tried: all combinations of a heading, a speed and a
// radius of curvature. Each speed is 16 % above the one before.
const (
	headings = 72
	speeds   = 17
	curves   = 5
	fronts   = 3 // the first so many curves are those of fronts, the rest of outflows
	lines    = headings * speeds * curves
)

// radiusOf is the radius of curvature of a line, m: the distance to the centre
// behind it; 0 stands for a straight one. Those below 3 km are the edges of
// single outflows, which are told otherwise.
func radiusOf(curve int) float64 {
	switch curve {
	case 0:
		return 0
	case 1:
		return 12000
	case 2:
		return 5000
	case 3:
		return 2000
	}
	return 1000
}

// priorCurve is how likely each is before the times are looked at.
func priorCurve(curve int) float64 {
	switch curve {
	case 0:
		return 0.4
	case 1, 2:
		return 0.2
	}
	return 0.1
}

func headingOf(h int) float64 { return float64(h) * (360.0 / headings) }

func speedOf(s int) float64 {
	return slowest * math.Pow(fastest/slowest, float64(s)/(speeds-1))
}

// What is believed of a front before its times are looked at. Behind a gust
// front the wind blows with it: the line moves at 0.59 of the greatest wind
// behind it (Mahoney 1988) or 0.67 (R.M. Wakimoto, Mon. Wea. Rev. 110, 1982;
// from memory). Not every front is like those: a part of the prior leaves the
// speed to the climate of fronts, and the heading to the change of wind.
const (
	shareBehind    = 0.62
	spreadBehind   = 0.35 // of the logarithm
	climateSpeed   = 8.6  // m/s
	climateSpread  = 0.5
	behindPart     = 0.6
	headingBehind  = 25.0 // degrees, about the wind behind
	headingChange  = 45.0 // degrees, about the change
	headingUniform = 0.1  // part of the prior that knows nothing
	lineRough      = 8.0  // s by which the edge comes early or late at a mast
	lineStrays     = 0.04 // the same as a part of the time that it has run
	// seenAfter is how long after the middle of the change a mast gives an
	// alarm, and spreadSeen how far that varies, s; missed is how often it gives
	// none at all.
	seenAfter  = 25.0
	spreadSeen = 15.0
	missed     = 0.1
	// kappa is the concentration of the directions of the change at the masts
	// about their mean: 20 degrees (von Mises).
	kappa = 8.0
	// Ninety percent of a normal distribution lie within so many deviations.
	ninety = 1.645
)

// bank holds what every line needs of the places: how far along its motion, in
// m from the middle of the masts, each lies.
type bank struct {
	places   int
	distance []float64 // [curve][heading][place]
	speed    [speeds]float64
	slow     [speeds]float64 // 1 / speed
	east     [headings]float64
	north    [headings]float64
	curved   [curves]float64 // log prior
	x, y     []float64       // of the places, from the middle, m
}

func newBank(x, y []float64, middleX, middleY float64) *bank {
	b := &bank{places: len(x), distance: make([]float64, curves*headings*len(x))}
	for i := range x {
		b.x, b.y = append(b.x, x[i]-middleX), append(b.y, y[i]-middleY)
	}
	for s := range speeds {
		b.speed[s] = speedOf(s)
		b.slow[s] = 1 / b.speed[s]
	}
	for h := range headings {
		b.east[h], b.north[h] = sincos(headingOf(h))
	}
	for c := range curves {
		b.curved[c] = math.Log(priorCurve(c))
		for h := range headings {
			row := b.row(c, h)
			r := radiusOf(c)
			for i := range x {
				dx, dy := b.x[i], b.y[i]
				if r == 0 {
					row[i] = float64(dx*b.east[h]) + float64(dy*b.north[h])
				} else {
					row[i] = math.Hypot(dx+float64(r*b.east[h]), dy+float64(r*b.north[h])) - r
				}
			}
		}
	}
	return b
}

func (b *bank) row(curve, heading int) []float64 {
	o := (curve*headings + heading) * b.places
	return b.distance[o : o+b.places]
}

// posterior is the scratch of weighing lines, and what came of it.
type posterior struct {
	weight  [lines]float64 // normalised over the lines of fronts
	t0      [lines]float64 // s, when the line passes the middle
	spread  [lines]float64 // variance of t0, s2
	odds    float64        // log of how much better lines explain the times than chance
	outflow float64        // share of what is no front: edges of outflows, and changes everywhere at once
	atOnce  float64        // scratch: log of prior times likelihood of the latter

	// Scratch of one row, by speed: the sum of squares that the times leave, and the
	// product of their variances and the sum of their inverses, some of which may
	// stand as a logarithm apart.
	ssr, product, logs [speeds]float64
	flat               []float64
}

// hit is a mast that has been reached: its place in the bank, and its onset.
type hit struct {
	place  int
	t, sd  float64
	change quantity.Vector // unit
}

// weigh fills the posterior from the masts that have been reached and those
// that have not (their places in the bank), at now (s).
func (p *posterior) weigh(b *bank, hits []hit, waiting []int, behind, change quantity.Vector, now float64) {
	p.times(b, hits, behind, change)
	best := p.atOnce
	for i := range p.weight {
		best = max(best, p.weight[i])
	}
	var sum float64
	edges := math.Exp(p.atOnce - best)
	for i := range p.weight {
		l := p.weight[i] - best
		if l < -hopeless {
			p.weight[i] = 0
			continue
		}
		w := float64(math.Exp(l) * p.unreached(b, i, waiting, now))
		if i >= fronts*headings*speeds {
			edges += w
			p.weight[i] = 0
			continue
		}
		p.weight[i] = w
		sum += w
	}
	p.odds, p.outflow = math.Inf(-1), 0
	if sum+edges > 0 {
		p.odds = best + math.Log(sum+edges)
		p.outflow = edges / (sum + edges)
	}
	if sum > 0 {
		for i := range p.weight {
			p.weight[i] /= sum
		}
	}
}

// A change that comes everywhere at once, such as that of an outflow that grows
// in place, is no line; the masts see it within growsWithin s of one another.
const (
	priorAtOnce = 0.2
	growsWithin = 15.0
)

// together fills atOnce.
func (p *posterior) together(hits []hit, agree, chance float64) {
	var w, wt, wtt, logs float64
	for k := range hits {
		v := float64(hits[k].sd*hits[k].sd) + growsWithin*growsWithin
		w += 1 / v
		wt += hits[k].t / v
		wtt += float64(hits[k].t*hits[k].t) / v
		logs += math.Log(v)
	}
	ssr := max(wtt-float64(wt*wt)/w, 0)
	p.atOnce = math.Log(priorAtOnce) + agree + chance -
		float64((ssr+logs+math.Log(w)+float64(float64(len(hits)-1)*math.Log(2*math.Pi)))/2)
}

// times fills weight with the logarithm of prior times likelihood of each line,
// the latter over that of times and directions by chance.
func (p *posterior) times(b *bank, hits []hit, behind, change quantity.Vector) {
	var chance float64
	for range len(hits) - 1 {
		chance += math.Log(chanceSpan)
	}
	constant := float64(float64(len(hits)-1) * math.Log(2*math.Pi))
	agree := agreement(hits, change)
	p.together(hits, agree, chance)
	// The directions are weighed once for all straight lines, and per mast for
	// the round ones, whose change points away from their centre.
	var prior [headings][speeds]float64
	fillPrior(b, behind, change, &prior)
	least := leastSpread(hits)
	best := p.atOnce
	i := 0
	for c := range curves {
		for h := range headings {
			row := b.row(c, h)
			turned := agree
			if c >= fronts {
				turned = b.roundAgreement(hits, c, h)
			}
			if !p.timesFast(i, b, hits, row) {
				for s := range speeds {
					p.timesOf(i+s, s, b.slow[s], hits, row)
				}
			}
			for s := range speeds {
				// The integral over t0 of the normal densities; a line that cannot
				// come within reach of the best is spared its logarithm.
				like := b.curved[c] + prior[h][s] + turned + chance - float64((p.ssr[s]+constant)/2)
				if p.weight[i] = math.Inf(-1); like-float64(least/2) > best-hopeless {
					p.weight[i] = like - float64((p.logs[s]+math.Log(p.product[s]))/2)
					best = max(best, p.weight[i])
				}
				i++
			}
		}
	}
}

// timesOf fills what the times of the hits leave of one line of a row, whose speed
// is 1/slow.
func (p *posterior) timesOf(line, s int, slow float64, hits []hit, row []float64) {
	var w, wt, wtt float64
	product, logs := 1.0, 0.0
	for k := range hits {
		q := &hits[k]
		away := float64(row[q.place] * slow)
		rough := float64(lineStrays * (away - float64(row[hits[0].place]*slow)))
		v := float64(q.sd*q.sd) + lineRough*lineRough + float64(rough*rough)
		r := q.t - away
		iv := 1 / v
		w += iv
		wt += float64(r * iv)
		wtt += float64(float64(r*r) * iv)
		if product *= v; product > tooGreat { // one logarithm for all
			logs, product = logs+math.Log(product), 1
		}
	}
	mean := wt / w
	p.t0[line], p.spread[line] = mean, 1/w
	p.ssr[s], p.product[s], p.logs[s] = max(wtt-float64(wt*mean), 0), product*w, logs
}

// tooGreat: a product so large is not multiplied further.
const tooGreat = 1e200

// hopeless is the logarithm of how much less likely than the best a line may be
// and still count.
const hopeless = 12

// leastSpread is the least that the logarithm of the product of the variances
// times the sum of their inverses can be, over all lines: it grows with each of
// them.
func leastSpread(hits []hit) float64 {
	w, logs := 0.0, 0.0
	for k := range hits {
		v := float64(hits[k].sd*hits[k].sd) + lineRough*lineRough
		w += 1 / v
		logs += math.Log(v)
	}
	return logs + math.Log(w)
}

// chanceSpan is the time over which changes that have nothing to do with each
// other would be spread, s.
const chanceSpan = 600.0

// concentrated is the log of how much likelier a direction is than by chance,
// given the cosine of its angle to where it is expected: von Mises, with
// I0(kappa) = exp(kappa)/sqrt(2 pi kappa).
func concentrated(cos float64) float64 {
	return float64(kappa*(cos-1)) + float64(math.Log(2*math.Pi*kappa)/2)
}

// agreement is the log of how much likelier the directions of the changes are
// about their mean than anywhere.
func agreement(hits []hit, mean quantity.Vector) float64 {
	size := mean.Speed()
	if size == 0 {
		return 0
	}
	sum := 0.0
	for k := range hits {
		cos := (float64(hits[k].change.East*mean.East) + float64(hits[k].change.North*mean.North)) / size
		sum += concentrated(cos)
	}
	// The mean is their own.
	return sum * float64(len(hits)-1) / float64(len(hits))
}

// roundAgreement is the same about the directions away from the centre of an
// outflow.
func (b *bank) roundAgreement(hits []hit, curve, heading int) float64 {
	sum := 0.0
	for k := range hits {
		e, n := b.outward(curve, heading, hits[k].place)
		cos := float64(hits[k].change.East*e) + float64(hits[k].change.North*n)
		sum += concentrated(cos)
	}
	return sum * float64(len(hits)-1) / float64(len(hits))
}

// outward is the unit vector away from the centre of a curved line at a place.
func (b *bank) outward(curve, heading, place int) (east, north float64) {
	r := radiusOf(curve)
	e, n := b.x[place]+float64(r*b.east[heading]), b.y[place]+float64(r*b.north[heading])
	d := math.Hypot(e, n)
	if d == 0 {
		return 0, 0
	}
	return e / d, n / d
}

// fillPrior fills the logarithm of the probability of each heading and speed,
// given the wind behind the line and the change across it.
func fillPrior(b *bank, behind, change quantity.Vector, prior *[headings][speeds]float64) {
	cell := math.Log(fastest/slowest) / (speeds - 1)
	from, part := behind.Speed(), behindPart
	if from < 2 {
		part = 0
	}
	size := change.Speed()
	var climate [speeds]float64
	for s := range climate {
		climate[s] = logNormal(b.speed[s], climateSpeed, climateSpread) * cell
	}
	for h := range headings {
		e, n := b.east[h], b.north[h]
		ahead := float64(behind.East*e) + float64(behind.North*n)
		likeBehind := 0.0
		if part > 0 {
			likeBehind = heading(ahead/from, headingBehind)
		}
		likeChange := 0.0
		if size > 0 {
			likeChange = heading((float64(change.East*e)+float64(change.North*n))/size, headingChange)
		}
		for s := range speeds {
			p := float64((float64((1-part-headingUniform)*likeChange) + headingUniform/headings) * climate[s])
			if likeBehind > 1e-9 && ahead > 1 {
				p += float64(float64(part*likeBehind) * float64(logNormal(b.speed[s], shareBehind*ahead, spreadBehind)*cell))
			}
			prior[h][s] = math.Log(max(p, 1e-30))
		}
	}
}

// heading is the probability of one of the headings tried, normal about a
// direction with the standard deviation sd in degrees, given the cosine of the
// angle between the two.
func heading(cos, sd float64) float64 {
	angle := math.Acos(min(max(cos, -1), 1)) * (180 / math.Pi) / sd
	return math.Exp(-float64(angle*angle)/2) * (360.0 / headings) / (sd * math.Sqrt(2*math.Pi))
}

// logNormal is the density of the logarithm of x about that of a median.
func logNormal(x, median, spread float64) float64 {
	d := math.Log(x/median) / spread
	return math.Exp(-float64(d*d)/2) / (spread * math.Sqrt(2*math.Pi))
}

// unreached is how likely it is under a line that the masts of waiting have
// given no alarm by now.
func (p *posterior) unreached(b *bank, line int, waiting []int, now float64) float64 {
	c, h, s := line/(headings*speeds), line/speeds%headings, line%speeds
	row := b.row(c, h)
	like := 1.0
	sd := math.Sqrt(p.spread[line] + lineRough*lineRough + spreadSeen*spreadSeen)
	for _, place := range waiting {
		due := p.t0[line] + row[place]/b.speed[s] + seenAfter
		// The logistic curve stands for the normal one (within 0.01).
		switch x := -1.702 * (due - now) / sd; {
		case x < -saturated:
		case x > saturated:
			like *= missed
		default:
			like *= missed + (1-missed)/(1+math.Exp(x))
		}
	}
	return like
}

// saturated: beyond it either way the logistic curve is 0 or 1 to the last bit.
const saturated = 45

// each calls see with every line of a front that has a weight, in order.
func (p *posterior) each(b *bank, see func(line, curve, heading int, speed, weight float64)) {
	for i := range fronts * headings * speeds {
		if w := p.weight[i]; w > 0 {
			see(i, i/(headings*speeds), i/speeds%headings, b.speed[i%speeds], w)
		}
	}
}

// arrival is when a front reaches a place, s, and the standard error of that.
func (p *posterior) arrival(b *bank, place int) (at, sd float64) {
	var mean, square, within float64
	p.each(b, func(line, c, h int, speed, w float64) {
		d := b.row(c, h)[place] / speed
		t := p.t0[line] + d
		mean += float64(w * t)
		square += float64(w * float64(t*t))
		rough := lineStrays * (t - p.t0[line])
		within += float64(w * (p.spread[line] + lineRough*lineRough + float64(rough*rough)))
	})
	return mean, math.Sqrt(max(square-float64(mean*mean), 0) + within)
}

// run is how far beyond the middle of the masts the line stands now (s), along
// a direction (degrees), m, and the standard deviation of that.
func (p *posterior) run(b *bank, toward, now float64) (mean, spread float64) {
	sin, cos := sincos(toward)
	var square, within float64
	p.each(b, func(line, _, h int, speed, w float64) {
		// Where the line cuts the axis; one that runs nearly along it cuts it
		// nowhere near.
		c := max(float64(b.east[h]*sin)+float64(b.north[h]*cos), 0.3)
		d := speed * (now - p.t0[line]) / c
		mean += float64(w * d)
		square += float64(w * float64(d*d))
		within += float64(float64(w*speed) * float64(speed*(p.spread[line]+lineRough*lineRough)))
	})
	return mean, math.Sqrt(max(square-float64(mean*mean), 0) + within)
}

// motion is the mean heading with its standard error (degrees), and the median
// speed with its 5 % and 95 % points.
func (p *posterior) motion(b *bank) (toward, spread, speed, low, high float64) {
	var e, n float64
	var by [speeds]float64
	p.each(b, func(line, _, h int, _, w float64) {
		e += float64(w * b.east[h])
		n += float64(w * b.north[h])
		by[line%speeds] += w
	})
	toward = float64(math.Atan2(e, n) * (180 / math.Pi))
	if toward < 0 {
		toward += 360
	}
	// The circular standard deviation, never finer than a heading tried.
	length := min(max(math.Hypot(e, n), 1e-6), 1)
	spread = max(math.Sqrt(-2*math.Log(length))*(180/math.Pi), 360.0/headings/math.Sqrt(12))
	quantile := func(q float64) float64 {
		cum := 0.0
		for s := range by {
			if cum+by[s] >= q {
				// Within a cell the logarithm of the speed is even.
				part := (q - cum) / by[s]
				return b.speed[s] * math.Pow(fastest/slowest, (part-0.5)/(speeds-1))
			}
			cum += by[s]
		}
		return b.speed[speeds-1]
	}
	bound := func(v float64) float64 { return min(max(v, slowest), fastest) }
	return toward, spread, bound(quantile(0.5)), bound(quantile(0.05)), bound(quantile(0.95))
}
