package windfield

import (
	"math"
	"math/rand/v2"
	"testing"

	gonum "gonum.org/v1/gonum/mat"

	"sockline/sensors"
	"sockline/sensors/averages"
)

// logDensity is that of N(mean, k) at y, by gonum's Cholesky factors, without what
// depends on the dimension alone.
func logDensity(t *testing.T, y, mean []float64, k *gonum.SymDense) float64 {
	t.Helper()
	var c gonum.Cholesky
	if !c.Factorize(k) {
		t.Fatal("not positive definite")
	}
	d := gonum.NewVecDense(len(y), nil)
	for i := range y {
		d.SetVec(i, y[i]-mean[i])
	}
	x := gonum.NewVecDense(len(y), nil)
	if err := c.SolveVecTo(x, d); err != nil {
		t.Fatal(err)
	}
	return -(gonum.Dot(d, x) + c.LogDet()) / 2
}

// What is believed of an error of known mean follows from the densities with and
// without it, and the error itself from the regression on what was observed.
func TestMistakeAgainstDensities(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 8))
	const n = 8
	for range 20 {
		random := func(rows, cols int) *gonum.Dense {
			m := gonum.NewDense(rows, cols, nil)
			for i := range rows {
				for j := range cols {
					m.Set(i, j, rng.NormFloat64())
				}
			}
			return m
		}
		root, phi := random(n, n), random(n, 2)
		k := gonum.NewSymDense(n, nil)
		k.SymOuterK(1, root)
		for i := range n {
			k.SetSym(i, i, k.At(i, i)+0.3)
		}
		wrong := mistake{mean: [2]float64{3 * rng.NormFloat64(), 3 * rng.NormFloat64()}, variance: 0.5 + 4*rng.Float64()}
		y := gonum.NewVecDense(n, nil)
		for i := range n {
			y.SetVec(i, 3*rng.NormFloat64())
		}
		// The dense way: the error adds its mean and covariance to the observations.
		with := gonum.NewSymDense(n, nil)
		with.SymOuterK(wrong.variance, phi)
		with.AddSym(with, k)
		shift := gonum.NewVecDense(n, nil)
		shift.MulVec(phi, gonum.NewVecDense(2, wrong.mean[:]))
		want := logDensity(t, y.RawVector().Data, shift.RawVector().Data, with) - logDensity(t, y.RawVector().Data, make([]float64, n), k)
		var solved, m gonum.Dense
		if err := solved.Solve(k, phi); err != nil {
			t.Fatal(err)
		}
		m.Mul(phi.T(), &solved)
		var b gonum.VecDense
		b.MulVec(solved.T(), y)
		information, seen := [3]float64{m.At(0, 0), m.At(0, 1), m.At(1, 1)}, [2]float64{b.AtVec(0), b.AtVec(1)}
		if got := wrong.evidence(information, seen); math.Abs(got-want) > 1e-8*(1+math.Abs(want)) {
			t.Errorf("evidence %g, by the densities %g", got, want)
		}
		rest := gonum.NewVecDense(n, nil)
		rest.SubVec(y, shift)
		x := gonum.NewVecDense(n, nil)
		if err := x.SolveVec(with, rest); err != nil {
			t.Fatal(err)
		}
		var gain gonum.VecDense
		gain.MulVec(phi.T(), x)
		got, _ := wrong.posterior(information, seen)
		for d := range got {
			if want := wrong.mean[d] + wrong.variance*gain.AtVec(d); math.Abs(got[d]-want) > 1e-8*(1+math.Abs(want)) {
				t.Errorf("error %d: %g, by regression %g", d, got[d], want)
			}
		}
	}
}

// eightMasts steps an estimator every tenth second from first to last over eight masts
// with turbulence of a fixed pattern, apart times as far apart as those of field: wind is
// the wind at second k of mast i without it, m/s.
func eightMasts(t *testing.T, apart float64, first, last int, wind func(k, i int) (u, v float64), see func(k int, e *Estimator, s *averages.Snapshot)) {
	t.Helper()
	masts, targets := field(8)
	for i := range masts {
		masts[i].X, masts[i].Y = apart*masts[i].X, apart*masts[i].Y
	}
	s := newSite(t, len(masts))
	e := New(masts, targets, s.layout, DefaultPrior())
	for k := 1; k <= last; k++ {
		s.report(k, func(i int) (float64, float64) {
			a, b := math.Sincos(float64(k)*0.7 + float64(i)*2.1)
			u, v := wind(k, i)
			return u + 0.8*a, v + 0.7*b
		})
		snapshot := s.recorder.Snapshot(epoch + sensors.Instant(k)*sensors.Second)
		if k%10 == 0 && k >= first {
			see(k, e, snapshot)
		}
	}
}

// uneven is a wind of 10 m/s in which the masts differ by eddies that stay, and mast 3
// tells what instrument makes of it from second 601 on.
func uneven(instrument func(u, v float64) (float64, float64)) func(k, i int) (u, v float64) {
	return func(k, i int) (float64, float64) {
		c, d := math.Sincos(float64(i) * 1.3)
		u, v := 10+1.5*c, 1.5*d
		if i == 3 && k > 600 {
			return instrument(u, v)
		}
		return u, v
	}
}

// A vane that slips, or cups that lose speed, from one second to the next are
// disbelieved at once where the neighbours speak against them, even if they are so far
// away that an outflow might stand over the one mast alone.
func TestStrokeIsNoOutflow(t *testing.T) {
	for name, instrument := range map[string]func(u, v float64) (float64, float64){
		"a vane slips":     func(u, v float64) (float64, float64) { return -v, u },
		"cups lose an arm": func(u, v float64) (float64, float64) { return 0.3 * u, 0.3 * v },
	} {
		eightMasts(t, 3, 10, 900, uneven(instrument), func(k int, e *Estimator, s *averages.Snapshot) {
			p := e.Step(s)
			if k >= 610 && (p.Doubt[3] < 0.9 || p.OutflowShare > 0.1 || p.Alone[3] < 1) {
				t.Errorf("%s, %d s later: doubted with %.3f, odds that it stands alone %.3g, an outflow with %.2f",
					name, k-600, p.Doubt[3], p.Alone[3], p.OutflowShare)
			}
		})
	}
}

// A stroke that the neighbours know as well is wind, and the mast is believed.
func TestStrokeOfAllIsWind(t *testing.T) {
	wind := func(k, _ int) (u, v float64) {
		if k > 600 {
			return 0, 9
		}
		return 9, 0
	}
	eightMasts(t, 1, 10, 700, wind, func(k int, e *Estimator, s *averages.Snapshot) {
		p := e.Step(s)
		for i := range s.Len() {
			if k > 600 && s.Mast(i).Stroke.At == 0 {
				t.Fatalf("mast %d at %d s: no stroke was seen", i, k)
			}
			if k > 640 && p.Doubt[i] > 0.1 {
				t.Errorf("mast %d at %d s: doubted with %.3f", i, k, p.Doubt[i])
			}
		}
	})
}

// A mast that is left out, or is worked on, takes no part: its stroke says nothing.
func TestStrokeOfOneThatTakesNoPart(t *testing.T) {
	slow := uneven(func(u, v float64) (float64, float64) { return 0.3 * u, 0.3 * v })
	eightMasts(t, 1, 620, 700, slow, func(k int, e *Estimator, s *averages.Snapshot) {
		if p := e.Step(s); p.Doubt[3] < 0.5 {
			t.Errorf("at %d s: a mast that slowed down is doubted with %.3f", k, p.Doubt[3])
		}
		if p := e.Without(s, 3); p.Doubt[3] > 0.001 || p.Alone[3] > 0.25 {
			t.Errorf("at %d s: without it, it is doubted with %.4f, odds alone %.3g", k, p.Doubt[3], p.Alone[3])
		}
		s.Mast(3).State = averages.Maintenance
		if p := e.Step(s); p.Doubt[3] > 0.001 || p.Alone[3] > 0.25 {
			t.Errorf("at %d s: worked on, it is doubted with %.4f, odds alone %.3g", k, p.Doubt[3], p.Alone[3])
		}
	})
}
