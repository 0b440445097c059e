package synthetic

import (
	"math"
	"reflect"
	"slices"
	"testing"

	"sockline/sensors/quantity"
)

func testStudy(masts ...string) Study {
	return Study{Seed: 17, Lines: []Line{testLine()}, Masts: masts}
}

// An episode depends on its number and the seed, not on what was drawn before.
func TestStudyRepeats(t *testing.T) {
	s := testStudy("a", "b", "c")
	for i := range 40 {
		if !reflect.DeepEqual(s.Episode(i), s.Episode(i)) {
			t.Fatalf("episode %d was drawn twice and differs", i)
		}
		later := s
		later.Seed += 20 // the mix repeats after twenty
		if i >= 20 && !reflect.DeepEqual(s.Episode(i), later.Episode(i-20)) {
			t.Fatalf("episode %d is not episode %d of the seed that lies 20 on", i, i-20)
		}
	}
	few := testStudy("x")
	a, b := s.Episode(3), few.Episode(3)
	a.Faults, b.Faults = nil, nil
	if !reflect.DeepEqual(a, b) {
		t.Error("the weather depends on the masts")
	}
}

// Expected: the shares and distributions that Episode states.
func TestStudyDistribution(t *testing.T) {
	const n = 8000
	s := testStudy("a", "b", "c", "d")
	kinds := map[StudyKind]int{}
	faults, eddies, round := 0, 0, 0
	var change, radius, wind []float64
	for i := range n {
		e := s.Episode(i)
		kinds[s.Kind(i)]++
		if len(e.Faults) > 0 {
			faults++
		}
		wind = append(wind, e.Speed)
		switch s.Kind(i) {
		case StudyOutflow:
			o := e.Outflows[0]
			change, radius = append(change, 2*o.Strength), append(radius, o.Radius)
			if o.Stretch == 1 {
				round++
			}
			if e.Eddies.Deviation > 0 {
				eddies++
			}
			if o.History.Starts < StudyWarmUp.Seconds() || o.History.Starts+o.History.Grows > StudyLength.Seconds() {
				t.Fatalf("episode %d: the outflow begins at %g s and grows for %g s", i, o.History.Starts, o.History.Grows)
			}
		case StudyFront:
			if len(e.Fronts) != 1 {
				t.Fatalf("episode %d has %d fronts", i, len(e.Fronts))
			}
		case StudySteady:
			if e.Eddies.Deviation != 0 {
				t.Fatalf("episode %d has eddies", i)
			}
		case StudyEddying:
			if d := e.Eddies.Deviation; d < 0.3 || d > 1.5 {
				t.Fatalf("episode %d has eddies of %g m/s", i, d)
			}
		}
	}
	for kind, share := range map[StudyKind]float64{StudyOutflow: 0.4, StudyFront: 0.1, StudySteady: 0.25, StudyEddying: 0.25} {
		near(t, "share of "+string(kind), float64(kinds[kind])/n, share, 1e-9)
	}
	// Four standard errors of a share of 0.1 and of 0.5.
	near(t, "share of faults", float64(faults)/n, 0.1, 0.0135)
	near(t, "share with eddies", float64(eddies)/float64(len(change)), 0.5, 0.036)
	near(t, "share of round ones", float64(round)/float64(len(change)), 0.5, 0.036)
	slices.Sort(change)
	slices.Sort(radius)
	slices.Sort(wind)
	// Wilson et al. 1984: median 22 m/s aloft; a mast sees 0.725 of it on average.
	near(t, "median change, m/s", change[len(change)/2], 22*0.725, 0.7)
	near(t, "median radius, m", radius[len(radius)/2], 1000, 36)
	near(t, "median wind, kt", quantity.Knots(wind[n/2]), 15, 0.7)
	near(t, "most wind, kt", quantity.Knots(wind[n-1]), 30, 0.1)
}

// Expected: U(10 m)/U(zm) of each profile at zm = 70 m, computed independently
// in Python: 0.397, 0.423, and 0.838 for a wall jet with d = 5 zm.
func TestStudyProfiles(t *testing.T) {
	for profile, want := range map[Profile]float64{ProfileOsegueraBowles: 0.397, ProfileVicroy: 0.423, ProfileWallJet: 0.838} {
		o := Outflow{Profile: profile, Height: 70}
		near(t, string(profile), 1/o.heightFactor(70), want, 6e-4)
	}
	// A profile changes the strength and nothing else that is drawn.
	for i := range 20 {
		spread, jet := testStudy("a"), testStudy("a")
		jet.Profile = ProfileWallJet
		a, b := spread.Episode(i), jet.Episode(i)
		for _, s := range []*Scene{a, b} {
			for k := range s.Outflows {
				s.Outflows[k].Strength, s.Outflows[k].Height, s.Outflows[k].Profile = 0, 0, ""
			}
		}
		if !reflect.DeepEqual(a, b) {
			t.Fatalf("episode %d is another one under a wall jet", i)
		}
	}
}

func TestReferenceIsTheOutflow(t *testing.T) {
	s := testStudy("a")
	for i := range 20 {
		scene := s.Episode(i)
		if r := s.Reference(i, scene); s.Kind(i) == StudyOutflow && r != scene.Outflows[0] {
			t.Errorf("episode %d: another outflow is looked for than is there", i)
		} else if r.Strength <= 0 || r.Radius <= 0 {
			t.Errorf("episode %d: nothing is looked for", i)
		}
	}
}

// At the time that Reaches gives, half of the change has come.
func TestFrontReaches(t *testing.T) {
	for _, f := range []Front{
		{X: 100, Y: -50, Passes: 400, Toward: 75, Speed: 9, Width: 200, Step: quantity.Vector{East: 10}},
		{X: 100, Y: -50, Passes: 400, Toward: 200, Speed: 6, Width: 120, Curve: 8000, Step: quantity.Vector{East: 10}},
	} {
		for _, p := range [][2]float64{{100, -50}, {2500, 900}, {-3000, 1200}} {
			u, _ := f.Wind(p[0], p[1], f.Reaches(p[0], p[1]))
			near(t, "wind", u, 5, 1e-9)
		}
	}
}

func TestStillOutflow(t *testing.T) {
	s := Still(3, ModelVicroy, 500, -200, 8, 900)
	w := s.Weather()
	end := s.Length.Seconds()
	u, v := w.Wind(500+900, -200, 10, end)
	mean := quantity.FromDirection(4, s.From)
	near(t, "outflow", math.Hypot(u-mean.East, v-mean.North), 8, 1e-9)
	if again := Still(3, ModelVicroy, 500, -200, 8, 900); !reflect.DeepEqual(s, again) {
		t.Error("the same place was drawn twice and differs")
	}
}
