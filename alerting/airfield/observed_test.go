package airfield

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// Skerry Moor with all masts: landing 07 is observed from 4010 to -1280 m,
// the figure that its description promises. The other figures were computed
// with plain Python from the file's positions: a mast's distance along the
// path +- sqrt(1000^2 - lateral^2), and +- 500 m for the outermost.
func TestObservedAtSkerryMoor(t *testing.T) {
	a := skerryMoor(t)
	all := a.MastPoints()
	live := func(ids ...string) []Point {
		var points []Point
		for _, m := range a.Masts {
			if slices.Contains(ids, m.ID) {
				points = append(points, m.Point)
			}
		}
		return points
	}
	for _, c := range []struct {
		name              string
		runway, operation string
		masts             []Point
		want              []Interval
		complete          bool
	}{
		{"all", "07", Landing, all, []Interval{{4010, -1280}}, true},
		{"all, other end", "25", Landing, all, []Interval{{4160, -1280}}, true},
		{"all, take-off", "07", TakeOff, all, []Interval{{0, -5440}}, true},
		{"none", "07", Landing, nil, nil, false},
		// final07 stands at 1860 m: alone it serves 500 m to either side.
		{"one mast", "07", Landing, live("final07"), []Interval{{2360, 1360}}, false},
		{"without final07", "07", Landing, live("far07", "touch07", "touch25", "mid-north", "mid-south"),
			[]Interval{{4010, 2523}, {913, -1280}}, false},
		{"only masts of the far side", "07", Landing, live("far25", "final25"), nil, false},
	} {
		p := mustPath(t, a, c.runway, c.operation)
		got := Observed(p, c.masts, Reach, Beyond)
		same := len(got) == len(c.want)
		for i := 0; same && i < len(got); i++ {
			same = near(got[i].From, c.want[i].From, 1) && near(got[i].To, c.want[i].To, 1)
		}
		if ok, _ := Complete(got, p.Needed()); !same || ok != c.complete {
			t.Errorf("%s: %s: %.0f complete %v, want %v %v", c.name, p.Name(), got, ok, c.want, c.complete)
		}
	}
}

// observedPoint is the definition of observed ground, point by point: the
// slow way, as an oracle.
func observedPoint(p Path, masts []Point, s float64) bool {
	x, y := p.At(s)
	within := false
	outer := Interval{From: math.Inf(-1), To: math.Inf(1)}
	for _, m := range masts {
		within = within || math.Hypot(m.X-x, m.Y-y) <= Reach
		// The distance of the mast from the path as a segment.
		along, _ := p.Along(m.X, m.Y)
		nx, ny := p.At(min(max(along, p.Extent().To), p.Extent().From))
		if math.Hypot(m.X-nx, m.Y-ny) < Reach {
			outer.From, outer.To = max(outer.From, along), min(outer.To, along)
		}
	}
	return within && s <= outer.From+Beyond && s >= outer.To-Beyond && p.Extent().Contains(s)
}

func TestObservedAgainstItsDefinition(t *testing.T) {
	a := skerryMoor(t)
	rng := rand.New(rand.NewPCG(7, 11))
	checked := 0
	for range 400 {
		p := a.Paths[rng.IntN(len(a.Paths))]
		masts := make([]Point, rng.IntN(9))
		for i := range masts {
			masts[i].X, masts[i].Y = p.Beside(rng.Float64()*14000-8000, rng.Float64()*2600-1300)
		}
		got := Observed(p, masts, Reach, Beyond)
		for i, iv := range got {
			if iv.Length() <= 0 || i > 0 && iv.From >= got[i-1].To {
				t.Fatalf("not in order or overlapping: %v", got)
			}
		}
		gaps := Unobserved(p, got)
		for s := p.Extent().To; s <= p.Extent().From; s += 13 {
			in, out, edge := false, false, false
			for _, iv := range got {
				in = in || iv.Contains(s)
				edge = edge || near(s, iv.From, 0.01) || near(s, iv.To, 0.01)
			}
			for _, iv := range gaps {
				out = out || iv.Contains(s)
			}
			if edge {
				continue
			}
			if want := observedPoint(p, masts, s); in != want || out == want {
				t.Fatalf("%s, masts %v, %.1f m: observed %v, gap %v, want %v", p.Name(), masts, s, in, out, want)
			}
			checked++
		}
	}
	if checked < 100000 {
		t.Errorf("only %d points checked", checked)
	}
}

func TestComplete(t *testing.T) {
	needed := Interval{2000, -500}
	for name, c := range map[string]struct {
		observed, gaps []Interval
	}{
		"whole":            {[]Interval{{4000, -1280}}, nil},
		"exactly":          {[]Interval{{2000, -500}}, nil},
		"none":             {nil, []Interval{{2000, -500}}},
		"only farther":     {[]Interval{{5000, 2500}}, []Interval{{2000, -500}}},
		"only nearer":      {[]Interval{{-600, -1200}}, []Interval{{2000, -500}}},
		"far end missing":  {[]Interval{{1500, -900}}, []Interval{{2000, 1500}}},
		"near end missing": {[]Interval{{3000, 0}}, []Interval{{0, -500}}},
		"hole":             {[]Interval{{3000, 1200}, {700, -900}}, []Interval{{1200, 700}}},
		"three gaps":       {[]Interval{{1900, 1000}, {900, 0}}, []Interval{{2000, 1900}, {1000, 900}, {0, -500}}},
		"rounding":         {[]Interval{{1999.9999, -499.9999}}, nil},
		"beyond the end":   {[]Interval{{1900, 100}, {-700, -900}}, []Interval{{2000, 1900}, {100, -500}}},
	} {
		ok, gaps := Complete(c.observed, needed)
		if ok != (len(c.gaps) == 0) || !slices.Equal(gaps, c.gaps) {
			t.Errorf("%s: %v %v, want %v", name, ok, gaps, c.gaps)
		}
	}
}

func TestMastsBeside(t *testing.T) {
	a := skerryMoor(t)
	points := a.MastPoints()
	for _, p := range a.Paths {
		var want []int
		for i, m := range points {
			s, _ := p.Along(m.X, m.Y)
			x, y := p.At(min(max(s, p.Extent().To), p.Extent().From))
			if math.Hypot(m.X-x, m.Y-y) < Reach {
				want = append(want, i)
			}
		}
		if got := MastsBeside(p, points, Reach); !slices.Equal(got, want) || len(got) == 0 || len(got) == len(points) {
			t.Errorf("%s: %v, want %v", p.Name(), got, want)
		}
	}
}

func TestObservedAllocatesNothing(t *testing.T) {
	a := skerryMoor(t)
	masts := a.MastPoints()
	dst, gaps, beside := make([]Interval, 0, len(masts)), make([]Interval, 0, len(masts)+1), make([]int, 0, len(masts))
	if n := testing.AllocsPerRun(100, func() {
		for _, p := range a.Paths {
			dst = AppendObserved(dst[:0], p, masts, Reach, Beyond)
			gaps = AppendGaps(gaps[:0], dst, p.Needed())
			beside = AppendMastsBeside(beside[:0], p, masts, Reach)
		}
	}); n != 0 {
		t.Errorf("%v allocations", n)
	}
}
