package survey

import (
	"math"
	"strings"
	"testing"

	"sockline/alerting/airfield"
	"sockline/alerting/windfield"
)

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if math.IsNaN(got) || math.Abs(got-want) > tolerance {
		t.Errorf("%s = %.6f, want %.6f within %g", what, got, want, tolerance)
	}
}

// Expected: the posterior of two-part Gaussian interpolation, computed
// independently in Python: L 1500 m, S 36 m2/s2, irrotational share 0.7, mean
// variance 25, error variance 1, masts at (-1000, 0), (1000, 0), (0, 1000).
func TestSpreadAgainstWorkedExample(t *testing.T) {
	fields := []windfield.Field{{Deviation: 6, Length: 1500, Irrotational: 0.7}}
	masts := []airfield.Point{{X: -1000}, {X: 1000}, {Y: 1000}}
	targets := []target{{0, 0, 1, 0}, {0, 0, 0, 1}, {0, -1000, 1, 0}, {0, -1000, 0, 1}, {500, 0, 1, 0}, {500, 0, 0, 1}}
	f := newField(fields, 5, 1, targets, masts)
	for i := range masts {
		f.watch(i)
	}
	for i, want := range []float64{3.0803, 2.6654, 5.0501, 5.2422, 2.3147, 2.0309} {
		near(t, "sd", f.spread(i), want, 6e-5)
	}
}

// What a site is said to gain is what conditioning on it does gain, and the
// order of the masts does not matter.
func TestGainsAgainstConditioning(t *testing.T) {
	p := newPlanning(network(t, "skerrymoor"))
	masts := p.network.Settings.Airfield.MastPoints()
	sites := append(masts[:5:5], airfield.Point{X: -3000, Y: 200}, airfield.Point{X: 900, Y: -2500}, masts[6])
	f := newField(p.fields, p.mean, p.noise, p.targets, sites)
	backwards := f.clone()
	for i := range 5 {
		f.watch(i)
		backwards.watch(4 - i)
	}
	near(t, "mean spread in another order", backwards.mean(), f.mean(), 1e-9)
	gains, err := f.gains(5)
	if err != nil {
		t.Fatal(err)
	}
	for k, want := range gains {
		g := f.clone()
		g.watch(5 + k)
		bits, err := g.bits(f)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "bits", want, bits, 1e-6)
		if g.mean() >= f.mean() {
			t.Errorf("site %d makes the headwind less known", k)
		}
	}
}

func TestDesignOfTheThreeNetworks(t *testing.T) {
	for _, name := range []string{"pellmark", "skerrymoor", "brandersea"} {
		n := network(t, name)
		d, err := DesignOf(n, Anywhere(n), 3)
		if err != nil {
			t.Fatal(err)
		}
		standing, _ := n.standing()
		if len(d.Masts) != len(standing) || len(d.Sites) != 3 || len(d.Paths) == 0 {
			t.Fatalf("%s: %d masts, %d sites, %d paths", name, len(d.Masts), len(d.Sites), len(d.Paths))
		}
		if !(d.Mean > 0 && d.Mean < d.Prior) {
			t.Errorf("%s: the masts leave %.2f of %.2f kt", name, d.Mean, d.Prior)
		}
		for _, m := range d.Masts {
			if m.Bits <= 0 || m.Mean < d.Mean {
				t.Errorf("%s: without %s %.2f bits are lost and %.2f kt are left of %.2f", name, m.ID, m.Bits, m.Mean, d.Mean)
			}
		}
		// Greedy choice: no later site gains more than the one before it.
		for i := 1; i < 3; i++ {
			if d.Sites[i].Bits > d.Sites[i-1].Bits+1e-9 || d.Sites[i].Mean > d.Sites[i-1].Mean {
				t.Errorf("%s: site %d gains %.2f bits after %.2f", name, i+1, d.Sites[i].Bits, d.Sites[i-1].Bits)
			}
		}
		// The place of the greatest gain lies where none stands.
		for _, m := range n.Settings.Airfield.Masts {
			if math.Hypot(m.X-d.Sites[0].X, m.Y-d.Sites[0].Y) < 250 {
				t.Errorf("%s: the next mast is to stand beside %s", name, m.ID)
			}
		}
		t.Logf("%s: %.2f of %.2f kt; masts %+v; next %+v", name, d.Mean, d.Prior, d.Masts, d.Sites)
	}
}

// The upper level of a tower is no mast of its own; the lower one is.
func TestTowersCountOnce(t *testing.T) {
	n := network(t, "brandersea")
	d, err := DesignOf(n, nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	var towers []string
	for _, m := range d.Masts {
		if strings.HasPrefix(m.ID, "tower") {
			towers = append(towers, m.ID)
		}
	}
	if len(towers) != 1 || towers[0] != "tower-10" || len(d.Masts) != len(n.Specs)-1 {
		t.Errorf("of the tower there are %q among %d masts", towers, len(d.Masts))
	}
}

func TestAreas(t *testing.T) {
	field := network(t, "skerrymoor").Settings.Airfield
	square := []airfield.Point{{X: -500, Y: 300}, {X: 500, Y: 300}, {X: 500, Y: 800}, {X: -500, Y: 800}}
	sites, err := Area{Polygons: [][]airfield.Point{square}}.Candidates(field)
	if err != nil {
		t.Fatal(err)
	}
	if len(sites) < 400 || len(sites) > 900 {
		t.Errorf("%d places in the square", len(sites))
	}
	for _, s := range sites {
		if s.X < -500 || s.X > 500 || s.Y < 300 || s.Y > 800 {
			t.Errorf("%v lies outside of the area", s.Point)
		}
	}
	for _, row := range []struct {
		name   string
		area   Area
		phrase string
	}{
		{"nothing", Area{}, "the area is empty"},
		{"a line", Area{Polygons: [][]airfield.Point{{{X: 0, Y: 0}, {X: 100, Y: 0}, {X: 50, Y: 0}}}}, "enclose no ground"},
		{"far away", Area{Sites: []Candidate{{Point: airfield.Point{X: 90000, Y: 0}}}}, "right way round"},
	} {
		if _, err := row.area.Candidates(field); err == nil || !strings.Contains(err.Error(), row.phrase) {
			t.Errorf("%s: error %v, want %q", row.name, err, row.phrase)
		}
	}
}

// Expected by drawing it: the corners of a square with points in and on it.
func TestHull(t *testing.T) {
	square := []airfield.Point{{X: 1, Y: 1}, {X: 0, Y: 0}, {X: 2, Y: 2}, {X: 2, Y: 0}, {X: 1, Y: 0}, {X: 0, Y: 2}, {X: 2, Y: 2}}
	got := hull(square)
	if len(got) != 4 || enclosed(got) != 4 {
		t.Errorf("the hull is %v", got)
	}
	for _, p := range []airfield.Point{{X: 0.5, Y: 0.5}, {X: 1.9, Y: 1.9}} {
		if !within(p, got) {
			t.Errorf("%v lies outside of %v", p, got)
		}
	}
	if within(airfield.Point{X: 2.1, Y: 1}, got) {
		t.Error("what lies outside is inside")
	}
}
