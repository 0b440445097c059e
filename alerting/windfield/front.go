package windfield

import (
	"math"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
)

// frontBank is every gust front that is tried: straight lines of a few
// headings and speeds, now at places one spacing apart between the masts. The
// strengths A are the change of wind behind the line, along its motion (which
// must be positive: a front is convergent) and to the left of it.
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
// each of the two strengths: [front][2][n].
func (b *frontBank) atLive(live []int) []float64 {
	n := blocks * 2 * len(live)
	out := make([]float64, len(b.fronts)*2*n)
	for j, f := range b.fronts {
		along, left := out[2*j*n:(2*j+1)*n], out[(2*j+1)*n:(2*j+2)*n]
		for k := range blocks {
			for i, m := range live {
				share := f.behind(b.masts[m].X, b.masts[m].Y, b.ages[k])
				o := (k*len(live) + i) * 2
				along[o], along[o+1] = share*f.east, share*f.north
				left[o], left[o+1] = -share*f.north, share*f.east
			}
		}
	}
	return out
}

func (b *frontBank) count() int { return len(b.fronts) }

func (b *frontBank) prior(int) (c [6]float64, q [dims]float64, rest float64) {
	return [6]float64{
		float64(b.p.FrontStrength * b.p.FrontStrength), 0, 0,
		float64(b.p.FrontAcross * b.p.FrontAcross), 0, 1,
	}, [dims]float64{1, 0, 0}, 0
}

func (b *frontBank) project(en *entry, w, out []float64) {
	n := len(b.fronts)
	for d := range 2 {
		blas64.Gemv(blas.NoTrans, 1, blas64.General{Rows: n, Cols: en.n, Stride: 2 * en.n, Data: en.fronts[d*en.n:]},
			vec(w), 0, vec(out[d*n:(d+1)*n]))
	}
	clear(out[2*n : 3*n])
}

func (b *frontBank) gram(en *entry, s *state, m []float64) {
	rows := 2 * len(b.fronts)
	tmp := make([]float64, rows*en.n)
	blas64.Gemm(blas.NoTrans, blas.NoTrans, 1, mat(rows, en.n, en.fronts), mat(en.n, en.n, s.inverse), 0, mat(rows, en.n, tmp))
	row := func(data []float64, i int) blas64.Vector { return vec(data[i*en.n : (i+1)*en.n]) }
	for j := range b.fronts {
		m[j*6] = blas64.Dot(row(tmp, 2*j), row(en.fronts, 2*j))
		m[j*6+1] = blas64.Dot(row(tmp, 2*j), row(en.fronts, 2*j+1))
		m[j*6+3] = blas64.Dot(row(tmp, 2*j+1), row(en.fronts, 2*j+1))
	}
}

func (b *frontBank) column(en *entry, j, d int, dst []float64) {
	if d == 2 {
		clear(dst)
		return
	}
	copy(dst, en.fronts[(2*j+d)*en.n:(2*j+d+1)*en.n])
}

func (b *frontBank) now(j, d int, dst []float64) {
	f := b.fronts[j]
	for t, g := range b.targets {
		share := f.behind(g.X, g.Y, 0)
		switch d {
		case 0:
			dst[t] = g.headwind(share*f.east, share*f.north)
		case 1:
			dst[t] = g.headwind(-share*f.north, share*f.east)
		default:
			dst[t] = 0
		}
	}
}

// innovation: a front's change is as good as steady over the blocks.
func (b *frontBank) innovation(_ int, dst []float64) { clear(dst) }
