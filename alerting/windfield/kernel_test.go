package windfield

import (
	"fmt"
	"math"
	"strconv"
	"testing"

	gonum "gonum.org/v1/gonum/mat"

	"sockline/testdata/outside"
)

// table reads an outside table: comment lines, the names of the columns, rows.
// Values that are no number stay out of the map of numbers.
func table(t *testing.T, name string) (text []map[string]string, numbers []map[string]float64) {
	t.Helper()
	text = outside.Rows(t, name)
	for _, row := range text {
		values := map[string]float64{}
		for column, cell := range row {
			if x, err := strconv.ParseFloat(cell, 64); err == nil {
				values[column] = x
			}
		}
		numbers = append(numbers, values)
	}
	return text, numbers
}

// Single values of the kernel: worked out in plain Python and confirmed by
// finite differences of the potentials' covariance to seven digits. The last is
// the closed form with equal parts, s2 (2 - d2/L2) exp(-d2/2L2) for s = 2 at
// (700, -400) m, as given with the outside tables.
func TestCovariance(t *testing.T) {
	irr := Field{Deviation: 1, Length: 1500, Irrotational: 1}
	nd := Field{Deviation: 1, Length: 1500, Irrotational: 0}
	tests := []struct {
		name       string
		f          Field
		dx, dy     float64
		ee, en, nn float64
		within     float64
	}{
		{"irrotational", irr, 600, 800, 0.672619, -0.170824, 0.572972, 5e-7},
		{"non-divergent", nd, 600, 800, 0.572972, 0.170824, 0.672619, 5e-7},
		{"irrotational, the other way", irr, -600, -800, 0.672619, -0.170824, 0.572972, 5e-7},
		{"irrotational, mirrored", irr, 600, -800, 0.672619, 0.170824, 0.572972, 5e-7},
		{"one place", irr, 0, 0, 1, 0, 1, 0},
		{"along the line, at one length", irr, 1500, 0, 0, 0, math.Exp(-0.5), 1e-15},
		{"across the line, at one length", nd, 1500, 0, math.Exp(-0.5), 0, 0, 1e-15},
		{"equal parts", Field{Deviation: 2 * math.Sqrt2, Length: 1500, Irrotational: 0.5}, 700, -400, 5.923887162815345, 0, 5.923887162815345, 1e-12},
	}
	for _, test := range tests {
		ee, en, nn := covariance(test.f, test.dx, test.dy)
		for i, pair := range [][2]float64{{ee, test.ee}, {en, test.en}, {nn, test.nn}} {
			if !(math.Abs(pair[0]-pair[1]) <= test.within) {
				t.Errorf("%s: element %d is %.9f, want %.9f", test.name, i, pair[0], pair[1])
			}
		}
	}
}

// windSet is one set of the outside table of posteriors.
type windSet struct {
	mean, sphi, lphi, spsi, lpsi, so float64
	x, y, u, v                       []float64
}

func windSets(t *testing.T) map[string]*windSet {
	t.Helper()
	words, rows := table(t, "gp_wind_obs.csv")
	sets := map[string]*windSet{}
	for i, r := range rows {
		s := sets[words[i]["set"]]
		if s == nil {
			s = &windSet{mean: r["smean_ms"], sphi: r["sphi_ms"], lphi: r["Lphi_m"], spsi: r["spsi_ms"], lpsi: r["Lpsi_m"], so: r["so_ms"]}
			sets[words[i]["set"]] = s
		}
		s.x, s.y = append(s.x, r["x_m"]), append(s.y, r["y_m"])
		s.u, s.v = append(s.u, r["u_ms"]), append(s.v, r["v_ms"])
	}
	return sets
}

// covariance of two wind vectors of a set: the common mean, a field with a
// potential and one with a stream function.
func (s *windSet) covariance(dx, dy float64) (ee, en, nn float64) {
	a, b, c := covariance(Field{Deviation: s.sphi, Length: s.lphi, Irrotational: 1}, dx, dy)
	d, e, f := covariance(Field{Deviation: s.spsi, Length: s.lpsi, Irrotational: 0}, dx, dy)
	return s.mean*s.mean + a + d, b + e, s.mean*s.mean + c + f
}

// cross is the covariance of the wind at x, y with every observation: two rows.
func (s *windSet) cross(x, y float64) *gonum.Dense {
	k := gonum.NewDense(2, 2*len(s.x), nil)
	for i := range s.x {
		ee, en, nn := s.covariance(x-s.x[i], y-s.y[i])
		k.Set(0, 2*i, ee)
		k.Set(0, 2*i+1, en)
		k.Set(1, 2*i, en)
		k.Set(1, 2*i+1, nn)
	}
	return k
}

// The kernel, conditioned by another library (gonum's Cholesky), gives the
// posterior means, deviations and covariances and the likelihoods that sympy's
// derivatives and scipy give.
func TestCovarianceAgainstPosteriorTable(t *testing.T) {
	sets := windSets(t)
	type solved struct {
		chol   gonum.Cholesky
		alpha  gonum.VecDense
		loglik float64
	}
	done := map[string]*solved{}
	for name, s := range sets {
		n := 2 * len(s.x)
		k := gonum.NewSymDense(n, nil)
		y := gonum.NewVecDense(n, nil)
		for i := range s.x {
			row := s.cross(s.x[i], s.y[i])
			for j := range n {
				for c := range 2 {
					if j >= 2*i+c {
						k.SetSym(2*i+c, j, row.At(c, j))
					}
				}
			}
			y.SetVec(2*i, s.u[i])
			y.SetVec(2*i+1, s.v[i])
		}
		for i := range n {
			k.SetSym(i, i, k.At(i, i)+s.so*s.so)
		}
		d := &solved{}
		if !d.chol.Factorize(k) {
			t.Fatalf("set %s: the covariance is not positive definite", name)
		}
		if err := d.chol.SolveVecTo(&d.alpha, y); err != nil {
			t.Fatal(err)
		}
		d.loglik = -(gonum.Dot(y, &d.alpha) + d.chol.LogDet() + float64(n)*math.Log(2*math.Pi)) / 2
		done[name] = d
	}
	words, rows := table(t, "gp_wind_post.csv")
	if len(rows) < 36 {
		t.Fatalf("the table has %d rows", len(rows))
	}
	for i, r := range rows {
		name := words[i]["set"]
		s, d := sets[name], done[name]
		k := s.cross(r["x_m"], r["y_m"])
		var mean gonum.VecDense
		mean.MulVec(k, &d.alpha)
		var half, fall gonum.Dense
		if err := d.chol.SolveTo(&half, k.T()); err != nil {
			t.Fatal(err)
		}
		fall.Mul(k, &half)
		ee, en, nn := s.covariance(0, 0)
		for _, c := range []struct {
			what      string
			got, want float64
		}{
			{"u", mean.AtVec(0), r["u_mean"]}, {"v", mean.AtVec(1), r["v_mean"]},
			{"sd of u", math.Sqrt(ee - fall.At(0, 0)), r["u_sd"]}, {"sd of v", math.Sqrt(nn - fall.At(1, 1)), r["v_sd"]},
			{"covariance", en - fall.At(0, 1), r["uv_cov"]}, {"log likelihood", d.loglik, r["set_log_lik"]},
		} {
			if math.Abs(c.got-c.want) > 5e-8 { // the table has eight digits
				t.Errorf("set %s, %s: %s is %.9f, the table has %.9f", name, words[i]["target"], c.what, c.got, c.want)
			}
		}
	}
}

// The broad outflow against a table of the model it is named after, at the two
// lowest heights: the wind of the template, times the table's strength and the
// model's height factor, is the table's wind. The compact one has its greatest
// wind, 1, at its radius.
func TestOutflowShapes(t *testing.T) {
	words, rows := table(t, "downburst_ob88.csv")
	compared := 0
	for i, r := range rows {
		// zs and eps as in the table's own remark; the profile is 1 at zm.
		zs := r["zm_m"] / 0.219629
		eps := zs / 12.5
		at := func(z float64) float64 { return math.Exp(-z/zs) - math.Exp(-z/eps) }
		height := at(r["z_m"]) / at(r["zm_m"])
		tpl := template{x: r["x0_m"], y: r["y0_m"], radius: 1.120906 * r["R_m"], shape: broad}
		east, north := tpl.wind(r["x_m"], r["y_m"])
		u, v := r["ua_ms"]+r["um_ms"]*height*east, r["va_ms"]+r["um_ms"]*height*north
		// The table rounds its constants to six digits.
		if math.Abs(u-r["u_ms"]) > 2e-4 || math.Abs(v-r["v_ms"]) > 2e-4 {
			t.Errorf("row %d, set %s at %g, %g, %g m: %.5f, %.5f m/s, the table has %.5f, %.5f", i+1, words[i]["set"],
				r["x_m"], r["y_m"], r["z_m"], u, v, r["u_ms"], r["v_ms"])
		}
		compared++
	}
	if compared < 300 {
		t.Errorf("%d rows were compared, the table has more", compared)
	}
	for _, s := range []shape{broad, compact} {
		best, where := 0.0, 0.0
		for q := 0.0; q < 4; q += 0.001 {
			if v := outflowShape(s, q); v > best {
				best, where = v, q
			}
		}
		if math.Abs(best-1) > 1e-6 || math.Abs(where-1) > 0.0015 {
			t.Errorf("shape %d has its greatest wind %.6f at %.4f of its radius, want 1 at 1", s, best, where)
		}
	}
	// Vicroy's profile from its own formula, r exp((2 - r^4)/4), against its
	// value at the peak.
	for _, q := range []float64{0.3, 0.7, 1.5, 2.2} {
		want := q * math.Exp((2-math.Pow(q, 4))/4) / math.Exp(0.25)
		if got := outflowShape(compact, q); math.Abs(got-want) > 1e-12 {
			t.Errorf("compact at %g: %.9f, want %.9f", q, got, want)
		}
	}
}

// An outflow blows away from its centre, equally in all directions.
func TestTemplateIsRadial(t *testing.T) {
	tpl := template{x: 500, y: -200, radius: 800, shape: broad}
	if e, n := tpl.wind(500, -200); e != 0 || n != 0 {
		t.Errorf("at its centre it blows %g, %g", e, n)
	}
	first := math.NaN()
	for deg := 0.0; deg < 360; deg += 15 {
		sin, cos := math.Sincos(deg * math.Pi / 180)
		e, n := tpl.wind(500+1200*sin, -200+1200*cos)
		if cross := e*cos - n*sin; math.Abs(cross) > 1e-12 {
			t.Errorf("toward %g deg it has %g across", deg, cross)
		}
		out := e*sin + n*cos
		if math.IsNaN(first) {
			first = out
		}
		if out <= 0 || math.Abs(out-first) > 1e-12 {
			t.Errorf("toward %g deg it blows %g, toward north %g", deg, out, first)
		}
	}
}

// invert3 against gonum.
func TestInvert3(t *testing.T) {
	for _, a := range [][6]float64{{2, 0.3, -0.1, 1.5, 0.4, 3}, {1, 0, 0, 1, 0, 1}, {36, 30, 20, 36, 28, 36}} {
		m := gonum.NewSymDense(3, []float64{a[0], a[1], a[2], a[1], a[3], a[4], a[2], a[4], a[5]})
		var want gonum.Dense
		if err := want.Inverse(m); err != nil {
			t.Fatal(err)
		}
		inv, logDet := invert3(a)
		got := gonum.NewSymDense(3, []float64{inv[0], inv[1], inv[2], inv[1], inv[3], inv[4], inv[2], inv[4], inv[5]})
		if !gonum.EqualApprox(got, &want, 1e-12) {
			t.Errorf("the inverse of %v is %v, want %v", a, inv, fmt.Sprint(gonum.Formatted(&want)))
		}
		if w := math.Log(gonum.Det(m)); math.Abs(logDet-w) > 1e-12 {
			t.Errorf("log |%v| is %g, want %g", a, logDet, w)
		}
	}
}
