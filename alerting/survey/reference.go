package survey

import (
	"math"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
	"gonum.org/v1/gonum/lapack/lapack64"

	"sockline/sensors/averages"
	"sockline/sensors/synthetic"
)

// reference is the test to which the delay is compared. It is told what no
// network knows: shape, size, place and motion of the outflow, and the
// statistics of the undisturbed air. Only the strength and the common mean wind
// are unknown to it. From the same block means as the engine it estimates the
// strength by generalised least squares,
//
//	A = F'K^-1 y / F'K^-1 F    sd(A) = (F'K^-1 F)^(-1/2)
//
// and with m the loss on the path for a strength of one, the signed root of the
// likelihood ratio of M >= level against M < level is
//
//	z = (A m - level) / (m sd(A))
//
// (S.S. Wilks, "The large-sample distribution of the likelihood ratio for
// testing composite hypotheses", Ann. Math. Statist. 9, 1938). It opens when z
// reaches a limit, which is set so that it opens falsely as often as the engine.
type reference struct {
	outflow synthetic.Outflow       // of strength one
	specs   []synthetic.StationSpec // that tell of the wind along the ground
	index   []int                   // their places among the stations
	ages    [averages.Blocks]float64
	n       int
	inverse []float64 // K^-1

	pattern, weighed, y []float64
}

// zLimits are the limits whose first passage is kept.
const (
	zStep  = 0.25
	zCount = 33 // 0 to 8
)

// undisturbed is the variance of the common mean, m2/s2: as good as unknown.
const undisturbed = 400.0

// newReference prepares the test; nil when the covariance cannot be used.
func newReference(n *Network, scene *synthetic.Scene, o synthetic.Outflow) *reference {
	o.Strength = 1
	layout := averages.NewLayout(n.Settings.Window)
	r := &reference{outflow: o}
	_, r.index = n.standing()
	for _, i := range r.index {
		r.specs = append(r.specs, n.Specs[i])
	}
	r.n = averages.Blocks * 2 * len(r.specs)
	for b := range r.ages {
		r.ages[b] = layout.Age(b)
	}
	r.pattern, r.weighed, r.y = make([]float64, r.n), make([]float64, r.n), make([]float64, r.n)
	// sigma1 of IEC 61400-1 along the wind and 0.8 of it across: their mean.
	sigma := scene.Turbulence * (0.75*scene.Speed + 5.6)
	air := averages.Turbulence{Variance: sigma * sigma * (1 + 0.64) / 2, Time: averages.ExpectedTime(scene.Speed)}
	u, v := -scene.Speed*math.Sin(scene.From*math.Pi/180), -scene.Speed*math.Cos(scene.From*math.Pi/180)
	k := make([]float64, r.n*r.n)
	for b := range averages.Blocks {
		for c := range averages.Blocks {
			dt := r.ages[c] - r.ages[b]
			for i := range r.specs {
				for j := range r.specs {
					dx, dy := r.specs[i].X-r.specs[j].X-u*dt, r.specs[i].Y-r.specs[j].Y-v*dt
					cov := undisturbed + scene.Eddies.Covariance(dx, dy, dt)
					if i == j {
						cov += layout.Covariance(air, b, c)
						if b == c {
							cov += 0.01 // the instrument's noise and rounding
						}
					}
					for d := range 2 {
						k[((b*len(r.specs)+i)*2+d)*r.n+(c*len(r.specs)+j)*2+d] = cov
					}
				}
			}
		}
	}
	tri, ok := lapack64.Potrf(blas64.Symmetric{Uplo: blas.Upper, N: r.n, Data: k, Stride: r.n})
	if !ok {
		return nil
	}
	if _, ok := lapack64.Potri(tri); !ok {
		return nil
	}
	for i := range r.n {
		for j := range i {
			k[i*r.n+j] = k[j*r.n+i]
		}
	}
	r.inverse = k
	return r
}

// look gives z at t seconds for a path on which a strength of one makes the
// loss unit (m/s); false before there is anything, or when a mast is not live.
func (r *reference) look(s *averages.Snapshot, t, unit, level float64) (z float64, ok bool) {
	share := r.outflow.Share(t)
	if share == 0 || unit == 0 {
		return 0, false
	}
	n := len(r.specs)
	for b := range averages.Blocks {
		for i := range r.specs {
			m := s.Mast(r.index[i])
			if m.State != averages.Live || !m.Blocks[b].Present {
				return 0, false
			}
			o := (b*n + i) * 2
			r.y[o], r.y[o+1] = m.Blocks[b].East, m.Blocks[b].North
			u, v := r.outflow.Wind(r.specs[i].X, r.specs[i].Y, truthHeight, t-r.ages[b])
			r.pattern[o], r.pattern[o+1] = u/share, v/share
		}
	}
	w := blas64.Vector{N: r.n, Inc: 1, Data: r.weighed}
	f := blas64.Vector{N: r.n, Inc: 1, Data: r.pattern}
	blas64.Gemv(blas.NoTrans, 1, blas64.General{Rows: r.n, Cols: r.n, Stride: r.n, Data: r.inverse}, f, 0, w)
	information := blas64.Dot(f, w)
	if information < 1e-12 {
		return 0, false
	}
	strength := blas64.Dot(blas64.Vector{N: r.n, Inc: 1, Data: r.y}, w) / information
	unit /= share
	z = (strength - level/unit) * math.Sqrt(information)
	// A path that the outflow hardly touches tells nothing of its strength.
	return z, !math.IsInf(z, 0)
}
