package windfield

import (
	"math"
	"slices"
)

// frontBank is every gust front that is tried: straight lines of a few
// headings and speeds, now at places one spacing apart between the masts. The
// strengths A are the change of wind behind the line, along its motion (which
// must be positive: a front is convergent) and to the left of it, and, to first
// order, the change along its motion times how far ahead of the place tried
// the line really is: a line between two places is not forced onto either.
type frontBank struct {
	fronts  []front
	targets []Target
	p       Prior
	ages    [blocks]float64
	masts   []Mast
	atMast  []float64 // [front][behind, ahead][block][mast]
	// atTarget is, for each front that was ever drawn, [strength][target] headwind
	// of unit strength now.
	atTarget [][]float64

	along, left []float64 // scratch of project: blocks x masts
}

// front is a line x sin(heading) + y cos(heading) = at, moving with speed.
type front struct {
	east, north float64 // unit vector of its motion
	at          float64 // where the line stands now, m along its motion
	speed       float64 // m/s
	width       float64 // half width of the change, m
}

// behind is how much of the change has come at a place, age seconds ago: a
// smooth step.
func (f front) behind(x, y, age float64) float64 {
	line := f.at - float64(f.speed*age)
	d := line - (float64(x*f.east) + float64(y*f.north))
	return (1 + math.Tanh(d/f.width)) / 2
}

// ahead is the derivative of behind by the place of the line, 1/m: with
// s = behind, 2 s (1 - s) / width.
func (f front) ahead(x, y, age float64) float64 {
	s := f.behind(x, y, age)
	return 2 * float64(s*(1-s)) / f.width
}

// wind of the strength d at a place, age seconds ago.
func (f front) wind(d int, x, y, age float64) (east, north float64) {
	switch d {
	case 0:
		s := f.behind(x, y, age)
		return s * f.east, s * f.north
	case 1:
		s := f.behind(x, y, age)
		return -s * f.north, s * f.east
	}
	s := f.ahead(x, y, age)
	return s * f.east, s * f.north
}

func newFrontBank(masts []Mast, targets []Target, ages [blocks]float64, p Prior) *frontBank {
	b := &frontBank{
		targets: targets, p: p, ages: ages, masts: masts,
		along: make([]float64, blocks*len(masts)), left: make([]float64, blocks*len(masts)),
	}
	for h := range p.FrontHeadings {
		sin, cos := math.Sincos(2 * math.Pi * float64(h) / float64(p.FrontHeadings))
		lo, hi := math.Inf(1), math.Inf(-1)
		for _, m := range masts {
			d := float64(m.X*sin) + float64(m.Y*cos)
			lo, hi = math.Min(lo, d), math.Max(hi, d)
		}
		for _, speed := range p.FrontSpeeds {
			// Up to where the last block before the line has left the last mast.
			end := hi + float64(speed*ages[blocks-1])
			for at := math.Ceil(lo/p.FrontSpacing) * p.FrontSpacing; at <= end; at += p.FrontSpacing {
				for _, width := range p.FrontWidths {
					b.fronts = append(b.fronts, front{east: sin, north: cos, at: at, speed: speed, width: width})
				}
			}
		}
	}
	b.atTarget = make([][]float64, len(b.fronts))
	b.atMast = make([]float64, 0, len(b.fronts)*2*blocks*len(masts))
	for _, f := range b.fronts {
		for _, change := range [...]func(x, y, age float64) float64{f.behind, f.ahead} {
			for _, age := range ages {
				for _, m := range masts {
					b.atMast = append(b.atMast, change(m.X, m.Y, age))
				}
			}
		}
	}
	return b
}

// atLive is how much of the change has come, and how fast it comes, at every
// live mast's block: [front][2][blocks x live]. The wind of the strengths is
// that times the front's direction, so nothing more need be kept.
func (b *frontBank) atLive(live []int) []float64 {
	out := make([]float64, 0, len(b.fronts)*2*blocks*len(live))
	for row := range slices.Chunk(b.atMast, len(b.masts)) {
		for _, m := range live {
			out = append(out, row[m])
		}
	}
	return out
}

func (b *frontBank) count() int { return len(b.fronts) }

func (b *frontBank) prior(int) (c [6]float64, q [dims]float64, rest float64) {
	// A line lies at most half a spacing from a place tried: a third of the
	// spacing is the deviation of an even spread, rounded up.
	shift := b.p.FrontStrength * b.p.FrontSpacing / 3
	return [6]float64{
		float64(b.p.FrontStrength * b.p.FrontStrength), 0, 0,
		float64(b.p.FrontAcross * b.p.FrontAcross), 0, float64(shift * shift),
	}, [dims]float64{1, 0, 0}, 0
}

// headings calls fn for each run of fronts of one heading.
func (b *frontBank) headings(fn func(f front, first, last int)) {
	for first := 0; first < len(b.fronts); {
		f, last := b.fronts[first], first+1
		for last < len(b.fronts) && b.fronts[last].east == f.east && b.fronts[last].north == f.north {
			last++
		}
		fn(f, first, last)
		first = last
	}
}

// columns is what atLive gave with the fronts of a heading innermost: for each
// heading [behind, ahead][blocks x live][front].
func (b *frontBank) columns(atLive []float64) []float64 {
	out := make([]float64, 0, len(atLive))
	b.headings(func(_ front, first, last int) {
		width := len(atLive) / len(b.fronts)
		out = append(out, transposed(atLive[first*width:last*width], last-first, width)...)
	})
	return out
}

// project: all fronts of one heading share the components of w along and to
// the left of it.
func (b *frontBank) project(en *entry, w, out []float64) {
	n, nb := len(b.fronts), en.n/2
	along, left := b.along[:nb], b.left[:nb]
	b.headings(func(f front, first, last int) {
		for i := range nb {
			along[i] = float64(w[2*i]*f.east) + float64(w[2*i+1]*f.north)
			left[i] = float64(w[2*i+1]*f.east) - float64(w[2*i]*f.north)
		}
		run := en.frontColumns[2*first*nb : 2*last*nb]
		shares, rates := run[:len(run)/2], run[len(run)/2:]
		columns(out[first:last], shares, along)
		columns(out[n+first:n+last], shares, left)
		columns(out[2*n+first:2*n+last], rates, along)
	})
}

// gram works on K^-1 turned into the axes of each heading, where a front is
// one number a mast and block.
func (b *frontBank) gram(en *entry, s *state, m []float64) {
	nb := en.n / 2
	axes := make([]float64, 3*nb*nb)
	var sums [6][]float64
	for i := range sums {
		sums[i] = make([]float64, len(b.fronts))
	}
	space := make([]float64, dims*len(b.fronts))
	b.headings(func(f front, first, last int) {
		turn(en, s, f, axes)
		run := en.frontColumns[2*first*nb : 2*last*nb]
		shares, rates := run[:len(run)/2], run[len(run)/2:]
		count := last - first
		times := space[:dims*count]
		along, across, left := times[:count], times[count:2*count], times[2*count:]
		for i := range nb {
			share, rate := shares[i*count:(i+1)*count], rates[i*count:(i+1)*count]
			axis := axes[dims*i*nb : dims*(i+1)*nb]
			columnsOf(times, count, shares, axis, count, dims)
			addProducts(sums[0][first:last], along, share)
			addProducts(sums[2][first:last], along, rate)
			addProducts(sums[1][first:last], across, share)
			addProducts(sums[3][first:last], left, share)
			columnsOf(times, count, rates, axis[:2*nb], count, 2)
			addProducts(sums[4][first:last], across, share)
			addProducts(sums[5][first:last], along, rate)
		}
	})
	for k, sum := range sums {
		for j, v := range sum {
			m[j*6+k] = v
		}
	}
}

// turn fills axes with K^-1 between the components along and along a heading,
// along and left of it, and left and left: [j][along, across, left][i].
func turn(en *entry, s *state, f front, axes []float64) {
	nb := en.n / 2
	ee, eno, nn := float64(f.east*f.east), float64(f.east*f.north), float64(f.north*f.north)
	for i := range nb {
		for j := range nb {
			k00, k01 := s.inverse[2*i*en.n+2*j], s.inverse[2*i*en.n+2*j+1]
			k10, k11 := s.inverse[(2*i+1)*en.n+2*j], s.inverse[(2*i+1)*en.n+2*j+1]
			o := dims*j*nb + i
			axes[o] = float64(ee*k00) + float64(eno*(k01+k10)) + float64(nn*k11)
			axes[nb+o] = float64(ee*k01) - float64(nn*k10) + float64(eno*(k11-k00))
			axes[2*nb+o] = float64(nn*k00) - float64(eno*(k01+k10)) + float64(ee*k11)
		}
	}
}

func (b *frontBank) column(en *entry, j, d int, dst []float64) {
	f, nb := b.fronts[j], blocks*len(en.live)
	which := 0
	if d == 2 {
		which = 1
	}
	for i, s := range en.fronts[(2*j+which)*nb : (2*j+which+1)*nb] {
		if d == 1 {
			dst[2*i], dst[2*i+1] = -s*f.north, s*f.east
		} else {
			dst[2*i], dst[2*i+1] = s*f.east, s*f.north
		}
	}
}

func (b *frontBank) now(j, d int, dst []float64) {
	nt := len(b.targets)
	if b.atTarget[j] == nil {
		b.atTarget[j] = make([]float64, 0, dims*nt)
		for d := range dims {
			for _, g := range b.targets {
				b.atTarget[j] = append(b.atTarget[j], g.Headwind(b.fronts[j].wind(d, g.X, g.Y, 0)))
			}
		}
	}
	copy(dst, b.atTarget[j][d*nt:(d+1)*nt])
}

// innovation: a front's change is as good as steady over the blocks.
func (b *frontBank) innovation(_ int, dst []float64) { clear(dst) }
