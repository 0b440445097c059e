package windfield

import (
	"math"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
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
	line := f.at - f.speed*age
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
	b := &frontBank{targets: targets, p: p, ages: ages, masts: masts}
	for h := range p.FrontHeadings {
		sin, cos := math.Sincos(2 * math.Pi * float64(h) / float64(p.FrontHeadings))
		lo, hi := math.Inf(1), math.Inf(-1)
		for _, m := range masts {
			d := float64(m.X*sin) + float64(m.Y*cos)
			lo, hi = math.Min(lo, d), math.Max(hi, d)
		}
		for _, speed := range p.FrontSpeeds {
			// Up to where the last block before the line has left the last mast.
			end := hi + speed*ages[blocks-1]
			for at := math.Ceil(lo/p.FrontSpacing) * p.FrontSpacing; at <= end; at += p.FrontSpacing {
				for _, width := range p.FrontWidths {
					b.fronts = append(b.fronts, front{east: sin, north: cos, at: at, speed: speed, width: width})
				}
			}
		}
	}
	return b
}

// atLive is the wind of every front at the live masts' blocks, one row for
// each of the strengths: [front][dims][n].
func (b *frontBank) atLive(live []int) []float64 {
	n := blocks * 2 * len(live)
	out := make([]float64, len(b.fronts)*dims*n)
	for j, f := range b.fronts {
		for d := range dims {
			row := out[(j*dims+d)*n : (j*dims+d+1)*n]
			for k := range blocks {
				for i, m := range live {
					o := (k*len(live) + i) * 2
					row[o], row[o+1] = f.wind(d, b.masts[m].X, b.masts[m].Y, b.ages[k])
				}
			}
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

func (b *frontBank) project(en *entry, w, out []float64) {
	n := len(b.fronts)
	for d := range dims {
		rows := blas64.General{Rows: n, Cols: en.n, Stride: dims * en.n, Data: en.fronts[d*en.n:]}
		blas64.Gemv(blas.NoTrans, 1, rows, vec(w), 0, vec(out[d*n:(d+1)*n]))
	}
}

func (b *frontBank) gram(en *entry, s *state, m []float64) {
	rows := dims * len(b.fronts)
	tmp := make([]float64, rows*en.n)
	blas64.Gemm(blas.NoTrans, blas.NoTrans, 1, mat(rows, en.n, en.fronts), mat(en.n, en.n, s.inverse), 0, mat(rows, en.n, tmp))
	row := func(data []float64, i int) blas64.Vector { return vec(data[i*en.n : (i+1)*en.n]) }
	for j := range b.fronts {
		k := 0
		for r := range dims {
			for c := r; c < dims; c++ {
				m[j*6+k] = blas64.Dot(row(tmp, dims*j+r), row(en.fronts, dims*j+c))
				k++
			}
		}
	}
}

func (b *frontBank) column(en *entry, j, d int, dst []float64) {
	copy(dst, en.fronts[(dims*j+d)*en.n:(dims*j+d+1)*en.n])
}

func (b *frontBank) now(j, d int, dst []float64) {
	for t, g := range b.targets {
		dst[t] = g.headwind(b.fronts[j].wind(d, g.X, g.Y, 0))
	}
}

// innovation: a front's change is as good as steady over the blocks.
func (b *frontBank) innovation(_ int, dst []float64) { clear(dst) }
