package kinematics

import (
	"math"
	"math/rand/v2"
	"testing"

	"sockline/testdata/outside"
)

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s is %.10g, want %.10g within %g", what, got, want, tolerance)
	}
}

func stations(t *testing.T) map[string]map[string]Wind {
	t.Helper()
	sets := map[string]map[string]Wind{}
	for _, row := range outside.Rows(t, "linear_wind_stations.csv") {
		n := func(c string) float64 { return outside.Number(t, row[c]) }
		if sets[row["case"]] == nil {
			sets[row["case"]] = map[string]Wind{}
		}
		sets[row["case"]][row["station"]] = Wind{X: n("x_m"), Y: n("y_m"), U: n("u_ms"), V: n("v_ms")}
	}
	return sets
}

// Ten sets of 3 to 12 stations and the linear field that R 4.2.2 lm() fits to
// them, with its errors; numpy 1.24.2 lstsq agrees to 5e-12.
func TestFitAgainstTable(t *testing.T) {
	sets := stations(t)
	for _, row := range outside.Rows(t, "linear_wind_fit.csv") {
		c := "case " + row["case"] + ": "
		var ws []Wind
		for _, w := range sets[row["case"]] { // the order must not matter
			ws = append(ws, w)
		}
		f, ok := Fit(ws)
		if !ok {
			t.Errorf("%sno fit", c)
			continue
		}
		n := func(column string) float64 { return outside.Number(t, row[column]) }
		near(t, c+"u0", f.U0, n("u0_ms"), 1e-7)
		near(t, c+"v0", f.V0, n("v0_ms"), 1e-7)
		near(t, c+"ux", f.UX, n("ux_s"), 1e-12)
		near(t, c+"uy", f.UY, n("uy_s"), 1e-12)
		near(t, c+"vx", f.VX, n("vx_s"), 1e-12)
		near(t, c+"vy", f.VY, n("vy_s"), 1e-12)
		near(t, c+"divergence", f.Divergence(), n("div_s"), 1e-12)
		near(t, c+"vorticity", f.Vorticity(), n("vort_s"), 1e-12)
		stretching, shearing := f.Deformation()
		near(t, c+"stretching", stretching, n("stretch_s"), 1e-12)
		near(t, c+"shearing", shearing, n("shear_s"), 1e-12)
		near(t, c+"error of the divergence", f.Error(1), n("se_div_unit"), 1e-11)
		if row["dof"] != "0" {
			near(t, c+"residual", f.Deviation, n("s_ms"), 2e-7)
		}
	}
}

// Triangles of those sets with the exact divergence and vorticity of the
// linear field in each (Bellamy 1949), worked out in fractions. Fit and
// Polygon must both give it: the methods are one (Davies-Jones 1993).
func TestTrianglesAgainstTable(t *testing.T) {
	sets := stations(t)
	for _, row := range outside.Rows(t, "delaunay_triangles.csv") {
		set := sets[row["case"]]
		ws := []Wind{set[row["a"]], set[row["b"]], set[row["c"]]}
		if (ws[1].X-ws[0].X)*(ws[2].Y-ws[0].Y) < (ws[2].X-ws[0].X)*(ws[1].Y-ws[0].Y) {
			ws[1], ws[2] = ws[2], ws[1] // anticlockwise
		}
		what := row["case"] + " " + row["a"] + row["b"] + row["c"] + ": "
		div, vort := outside.Number(t, row["div_s"]), outside.Number(t, row["vort_s"])
		tolerance := 1e-10 * math.Max(1, math.Max(math.Abs(div), math.Abs(vort))*1e3)
		f, ok := Fit(ws)
		d, z, enclosed := Polygon(ws)
		if !ok || !enclosed {
			t.Errorf("%sno field", what)
			continue
		}
		near(t, what+"divergence", f.Divergence(), div, tolerance)
		near(t, what+"vorticity", f.Vorticity(), vort, tolerance)
		near(t, what+"divergence around", d, div, tolerance)
		near(t, what+"vorticity around", z, vort, tolerance)
	}
}

// Bellamy's own definition: the divergence is the rate at which the area of
// the triangle grows when its corners are carried by their winds, the vorticity
// the same with all winds turned by a right angle to the right.
func TestBellamy(t *testing.T) {
	ws := []Wind{{0, 0, -4, -3}, {1000, 0, 8, -2}, {300, 800, 1, 7}}
	area := func(p []Wind) float64 {
		return ((p[1].X-p[0].X)*(p[2].Y-p[0].Y) - (p[2].X-p[0].X)*(p[1].Y-p[0].Y)) / 2
	}
	growth := func(turned bool) float64 {
		const dt = 1e-3
		sum := 0.0
		for i := range ws {
			moved := append([]Wind(nil), ws...)
			u, v := ws[i].U, ws[i].V
			if turned {
				u, v = v, -u
			}
			moved[i].X += u * dt
			moved[i].Y += v * dt
			sum += (area(moved) - area(ws)) / dt / area(ws)
		}
		return sum
	}
	f, _ := Fit(ws)
	near(t, "divergence", f.Divergence(), 0.024125, 1e-12)
	near(t, "by the growth of the area", growth(false), 0.024125, 1e-9)
	near(t, "vorticity", f.Vorticity(), -0.00075, 1e-12)
	near(t, "vorticity by growth", growth(true), -0.00075, 1e-9)
	stretching, shearing := f.Deformation()
	near(t, "stretching", stretching, -0.000125, 1e-12)
	near(t, "shearing", shearing, 0.00275, 1e-12)
	near(t, "error for 1 m/s", f.Error(1), 0.0021139, 5e-8)
}

// A worked case of five stations, computed apart with plain Python.
func TestWorkedCase(t *testing.T) {
	f, ok := Fit([]Wind{
		{-700, -600, -3.5, -5.4}, {800, -500, 9.3, -5.0}, {900, 700, 8.8, 4.4}, {-600, 800, -2.1, 5.1}, {50, 20, 2.4, -0.1},
	})
	if !ok {
		t.Fatal("no fit")
	}
	near(t, "u0", f.U0, 2.28488, 5e-6)
	near(t, "v0", f.V0, -0.830306, 5e-7)
	near(t, "divergence", f.Divergence(), 0.0155243, 5e-8)
	near(t, "vorticity", f.Vorticity(), 8.0637e-5, 5e-9)
	near(t, "error", f.Error(1), 0.0010165, 5e-8)
	near(t, "residual", f.Deviation, 0.6157, 5e-5)
	sin, cos := math.Sincos(60 * math.Pi / 180)
	near(t, "along 060", f.Along(sin, cos), 0.0077014, 5e-8)
}

// Error is what the scatter of many fits shows (Davies-Jones 1993).
func TestErrorAgainstScatter(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	places := []Wind{{X: 0, Y: 0}, {X: 1500, Y: 200}, {X: 400, Y: 1900}, {X: -900, Y: 700}}
	var sum, squares, want float64
	const n = 20000
	for range n {
		ws := append([]Wind(nil), places...)
		for i := range ws {
			ws[i].U, ws[i].V = rng.NormFloat64(), rng.NormFloat64()
		}
		f, _ := Fit(ws)
		want = f.Error(1)
		d := f.Divergence()
		sum += d
		squares += d * d
	}
	// The standard error of a standard deviation of n values is sd/sqrt(2n): 0.5 %.
	near(t, "scatter of the divergence", math.Sqrt(squares/n-sum*sum/n/n), want, 0.02*want)
}

func TestFitSaysNo(t *testing.T) {
	for _, ws := range [][]Wind{
		nil,
		{{X: 0}, {X: 1000}},
		{{X: 0}, {X: 1000}, {X: 2000}},
		{{X: 5, Y: 5}, {X: 5, Y: 5}, {X: 5, Y: 5}},
	} {
		if _, ok := Fit(ws); ok {
			t.Errorf("%v has a linear field", ws)
		}
		if _, _, ok := Polygon(ws); ok {
			t.Errorf("%v encloses something", ws)
		}
	}
	round, _ := Fit([]Wind{{X: 0}, {X: 1000}, {X: 500, Y: 866}})
	flat, _ := Fit([]Wind{{X: 0}, {X: 1000}, {X: 500, Y: 50}})
	if math.Abs(round.Shape-1) > 1e-3 || flat.Shape > 0.1 {
		t.Errorf("shapes %.3f and %.3f", round.Shape, flat.Shape)
	}
}
