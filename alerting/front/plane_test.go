package front

import (
	"math"
	"testing"

	"sockline/testdata/outside"
)

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s is %.8g, want %.8g within %g", what, got, want, tolerance)
	}
}

// The tables hold ten sets of arrival times and the plane that R 4.2.2 lm()
// fits to them, with its standard errors.
func TestFitAgainstTable(t *testing.T) {
	passages := map[string][]Passage{}
	for _, row := range outside.Rows(t, "plane_front_stations.csv") {
		n := func(c string) float64 { return outside.Number(t, row[c]) }
		passages[row["case"]] = append(passages[row["case"]], Passage{X: n("x_m"), Y: n("y_m"), T: n("t_s")})
	}
	for _, row := range outside.Rows(t, "plane_front_fit.csv") {
		c := "case " + row["case"] + ": "
		n := func(column string) float64 { return outside.Number(t, row[column]) }
		p, ok := Fit(passages[row["case"]])
		if !ok {
			t.Errorf("%sno fit", c)
			continue
		}
		near(t, c+"n", float64(p.N), n("n"), 0)
		near(t, c+"t0", p.T0, n("t0_s"), 1e-5)
		near(t, c+"sx", p.SX, n("sx_s_per_m"), 1e-10)
		near(t, c+"sy", p.SY, n("sy_s_per_m"), 1e-10)
		near(t, c+"speed", p.Speed(), n("speed_ms"), 1e-5)
		near(t, c+"heading", p.Toward(), n("heading_deg"), 1e-5)
		if row["dof"] == "0" {
			near(t, c+"residual of three", p.Deviation, 0, 0)
			continue
		}
		speed, toward := p.Errors()
		near(t, c+"residual", p.Deviation, n("sigma_s"), 1e-5)
		near(t, c+"error of the speed", speed, n("se_speed_ms"), 2e-6)
		near(t, c+"error of the heading", toward, n("se_heading_deg"), 2e-6)
		// The fit gives back what the times were made from, within their noise.
		if n("noise_s") <= 10 {
			near(t, c+"true speed", p.Speed(), n("true_speed_ms"), 0.3)
			near(t, c+"true heading", math.Remainder(p.Toward()-n("true_heading_deg"), 360), 0, 1.6)
		}
	}
}

// A worked case, computed apart with plain Python: five masts, a front of 12
// m/s toward 120 degrees, times with errors of 1 to 3 s.
func TestFitWorkedCase(t *testing.T) {
	ps := []Passage{
		{X: 0, Y: 0, T: 100}, {X: 1800, Y: 200, T: 224}, {X: 900, Y: 1500, T: 99},
		{X: -700, Y: 1100, T: 5}, {X: 400, Y: -1300, T: 185},
	}
	p, ok := Fit(ps)
	if !ok {
		t.Fatal("no fit")
	}
	near(t, "t0", p.T0, 100.924, 5e-4)
	near(t, "sx", p.SX, 0.0720546, 5e-8)
	near(t, "sy", p.SY, -0.0430345, 5e-8)
	near(t, "speed", p.Speed(), 11.915, 5e-4)
	near(t, "toward", p.Toward(), 120.85, 5e-3)
	near(t, "residual", p.Deviation, 2.61, 5e-3)
	speed, toward := p.Errors()
	near(t, "error of the speed", speed, 0.185, 5e-4)
	near(t, "error of the heading", toward, 0.885, 5e-4)
	near(t, "arrival", p.At(2500, -1500), 345.6, 0.05)
	for i, want := range []float64{-0.92, 1.98, -2.22, 1.85, -0.69} {
		near(t, "a residual", ps[i].T-p.At(ps[i].X, ps[i].Y), want, 5e-3)
	}
	three, ok := Fit(ps[:3])
	if !ok {
		t.Fatal("no fit to three")
	}
	near(t, "speed of three", three.Speed(), 11.559, 5e-4)
	near(t, "toward of three", three.Toward(), 121.34, 5e-3)
	if p.aligned() || p.scattered() {
		t.Error("a sound plane is refused")
	}
}

// Masts in a line tell the speed along it and nothing else.
func TestFitInALine(t *testing.T) {
	// 10 m/s toward 60 degrees over masts along 090: it runs along them with
	// 10/sin 60 = 11.547 m/s.
	sin, cos := math.Sincos(60 * math.Pi / 180)
	var ps []Passage
	for _, x := range []float64{0, 900, 2100, 3300} {
		ps = append(ps, Passage{X: x, Y: 100, T: (x*sin + 100*cos) / 10, SD: 5})
	}
	p, ok := Fit(ps)
	if ok {
		t.Error("a plane is fitted to masts in a line")
	}
	if !p.aligned() {
		t.Error("masts in a line are not told")
	}
	near(t, "speed along the line", 1/p.apparent(ps), 10/sin, 1e-9)
	ps[2].Y += 120 // still nearly a line
	if p, _ := Fit(ps); !p.aligned() {
		t.Error("masts within 150 m of a line are not told")
	}
}

// Times that no straight front explains are refused: those of a change that
// spreads from the middle of the masts.
func TestFitRefusesARing(t *testing.T) {
	var ps []Passage
	for _, p := range [][2]float64{{1000, 0}, {-1200, 100}, {0, 1500}, {100, -900}, {50, 60}} {
		ps = append(ps, Passage{X: p[0], Y: p[1], T: math.Hypot(p[0], p[1]) / 8})
	}
	p, ok := Fit(ps)
	if !ok || !p.scattered() {
		t.Errorf("a ring passes for a straight front, residual %.1f s", p.Deviation)
	}
}

// A weight is one over the square of the standard error: two sets of which one
// is a hundred times as sure give nearly that one's plane.
func TestFitWeights(t *testing.T) {
	var ps []Passage
	for _, p := range [][2]float64{{0, 0}, {2000, 0}, {0, 2000}, {2000, 2000}} {
		ps = append(ps, Passage{X: p[0], Y: p[1], T: p[0] / 10, SD: 1}, Passage{X: p[0], Y: p[1], T: p[1] / 10, SD: 100})
	}
	p, _ := Fit(ps)
	near(t, "sx", p.SX, 0.1, 2e-5)
	near(t, "sy", p.SY, 0, 2e-5)
}
