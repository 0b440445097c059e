package airfield

import (
	"errors"
	"math"
	"math/rand/v2"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/BurntSushi/toml"
)

// skerryMoorSpec is the geometry of the invented airfield in
// testdata/airfields, with the default path lengths.
func skerryMoorSpec(t testing.TB) Spec {
	t.Helper()
	var file struct {
		Airfield struct {
			ID, Name string
			Position [2]float64
		}
		Runway []struct {
			End []struct {
				Designator string
				Threshold  [2]float64
			}
		}
		Station []struct {
			ID       string
			Position [2]float64
		}
	}
	if _, err := toml.DecodeFile(filepath.Join("..", "..", "testdata", "airfields", "skerrymoor.toml"), &file); err != nil {
		t.Fatal(err)
	}
	spec := Spec{
		ID: file.Airfield.ID, Name: file.Airfield.Name, Elevation: 42,
		Latitude: file.Airfield.Position[0], Longitude: file.Airfield.Position[1],
	}
	for _, r := range file.Runway {
		var ends []EndSpec
		for _, e := range r.End {
			ends = append(ends, EndSpec{
				Designator: e.Designator, Latitude: e.Threshold[0], Longitude: e.Threshold[1],
				GlidePath: DefaultGlidePath, CrossingHeight: DefaultCrossingHeight,
				LandingLength: DefaultLandingLength, TakeoffLength: DefaultTakeoffLength,
			})
		}
		spec.Runways = append(spec.Runways, RunwaySpec{Width: 18, Ends: ends})
	}
	for _, s := range file.Station {
		spec.Masts = append(spec.Masts, MastSpec{ID: s.ID, Latitude: s.Position[0], Longitude: s.Position[1], Height: 10})
	}
	return spec
}

func skerryMoor(t testing.TB) *Airfield {
	t.Helper()
	a, err := New(skerryMoorSpec(t))
	if err != nil {
		t.Fatal(err)
	}
	return a
}

func mustPath(t testing.TB, a *Airfield, runway, operation string) Path {
	t.Helper()
	p, ok := a.Path(runway, operation)
	if !ok {
		t.Fatalf("no path %s %s", operation, runway)
	}
	return p
}

func near(a, b, tolerance float64) bool { return math.Abs(a-b) <= tolerance }

func TestPathsOfSkerryMoor(t *testing.T) {
	a := skerryMoor(t)
	// The runway is 1280 m long by its description; extents and needed ground
	// follow from the definitions of the two operations.
	for i, want := range []struct {
		name           string
		bearing        float64
		extent, needed Interval
	}{
		{"landing 07", 64, Interval{5000, -1280}, Interval{2000, -500}},
		{"take-off 07", 64, Interval{0, -6280}, Interval{0, -3280}},
		{"landing 25", 244, Interval{5000, -1280}, Interval{2000, -500}},
		{"take-off 25", 244, Interval{0, -6280}, Interval{0, -3280}},
	} {
		p := a.Paths[i]
		if p.Name() != want.name || p.Name() != p.Operation()+" "+p.Runway() {
			t.Errorf("path %d is %q, want %q", i, p.Name(), want.name)
		}
		if !near(p.BearingTrue(), want.bearing, 0.05) || !near(p.RunwayLength(), 1280, 1) {
			t.Errorf("%s: bearing %.3f, length %.2f", p.Name(), p.BearingTrue(), p.RunwayLength())
		}
		for _, c := range [][2]Interval{{p.Extent(), want.extent}, {p.Needed(), want.needed}} {
			if !near(c[0].From, c[1].From, 1) || !near(c[0].To, c[1].To, 1) {
				t.Errorf("%s: %v, want %v", p.Name(), c[0], c[1])
			}
		}
	}
	if len(a.Paths) != 4 || len(a.Masts) != 8 {
		t.Errorf("%d paths, %d masts", len(a.Paths), len(a.Masts))
	}
	east, north := a.Paths[0].Direction()
	if !near(math.Atan2(east, north)/degree, a.Paths[0].BearingTrue(), 0.02) || !near(math.Hypot(east, north), 1, 1e-12) {
		t.Errorf("direction %v, %v does not fit bearing %v", east, north, a.Paths[0].BearingTrue())
	}
}

func TestNeededIsCutToTheExtent(t *testing.T) {
	spec := skerryMoorSpec(t)
	for i := range spec.Runways[0].Ends {
		spec.Runways[0].Ends[i].LandingLength, spec.Runways[0].Ends[i].TakeoffLength = 1500, 900
	}
	a, err := New(spec)
	if err != nil {
		t.Fatal(err)
	}
	if n := mustPath(t, a, "07", Landing).Needed(); n != (Interval{1500, -500}) {
		t.Errorf("landing: %v", n)
	}
	p := mustPath(t, a, "07", TakeOff)
	if p.Needed() != p.Extent() || !near(p.Needed().To, -2180, 1) {
		t.Errorf("take-off: %v of %v", p.Needed(), p.Extent())
	}
}

func TestAtAndAlongAreInverse(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for _, p := range skerryMoor(t).Paths {
		for range 100 {
			s, right := rng.Float64()*12000-6000, rng.Float64()*4000-2000
			gotS, gotRight := p.Along(p.Beside(s, right))
			if !near(gotS, s, 1e-8) || !near(gotRight, right, 1e-8) {
				t.Fatalf("%s: %v, %v came back as %v, %v", p.Name(), s, right, gotS, gotRight)
			}
		}
	}
	// Landing 07 flies east-north-east: before the threshold is west of it,
	// and the right-hand side is south.
	p := mustPath(t, skerryMoor(t), "07", Landing)
	x0, y0 := p.At(0)
	if x, _ := p.At(1000); x >= x0 {
		t.Errorf("before the threshold is not west: %v, %v", x, x0)
	}
	if _, y := p.Beside(0, 100); y >= y0 {
		t.Errorf("right is not south: %v, %v", y, y0)
	}
	far := skerryMoor(t).Runways[0].Ends[1].Threshold
	if x, y := p.At(-p.RunwayLength()); !near(x, far.X, 1e-6) || !near(y, far.Y, 1e-6) {
		t.Errorf("the runway ends at %v, %v, not at %v", x, y, far)
	}
}

// Heights of a 3 degree path with a 15 m crossing height: tan 3 deg x distance
// + 15 m, 119.8 m at 2 km and 277.0 m at 5 km.
func TestGlideHeight(t *testing.T) {
	a := skerryMoor(t)
	for _, c := range []struct{ s, want float64 }{{0, 15}, {2000, 119.8}, {5000, 277.0}, {-286.2, 0}, {-1000, 0}} {
		if got := mustPath(t, a, "07", Landing).GlideHeight(c.s); !near(got, c.want, 0.05) {
			t.Errorf("%v m before: %.2f m, want %.1f", c.s, got, c.want)
		}
	}
	if got := mustPath(t, a, "07", TakeOff).GlideHeight(-3000); got != 0 {
		t.Errorf("take-off: %v", got)
	}
}

func TestVariationOfAnAirfield(t *testing.T) {
	at := time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC)
	spec := skerryMoorSpec(t)
	a, err := New(spec)
	if err != nil {
		t.Fatal(err)
	}
	want, _ := RoundedVariation(spec.Latitude, spec.Longitude, spec.Elevation, at)
	if got, err := a.Variation(at); err != nil || got != want || near(got, 0, 1) {
		t.Errorf("%v, %v, want the model's %v", got, err, want)
	}
	late := time.Date(2031, 1, 1, 0, 0, 0, 0, time.UTC)
	if _, err := a.Variation(late); err == nil {
		t.Error("a variation after the end of the model")
	}
	fixed := -7.25
	spec.Variation = &fixed
	if a, err = New(spec); err != nil {
		t.Fatal(err)
	}
	fixed = 99 // the airfield keeps its own copy
	if got, err := a.Variation(late); err != nil || got != -7.25 {
		t.Errorf("configured variation: %v, %v", got, err)
	}
}

func TestFaults(t *testing.T) {
	end := func(s *Spec, i int) *EndSpec { return &s.Runways[0].Ends[i] }
	for name, c := range map[string]struct {
		change func(*Spec)
		field  string
		phrase string
	}{
		"reference point":     {func(s *Spec) { s.Latitude = 91 }, "airfield.position", "latitude must be"},
		"not a number":        {func(s *Spec) { s.Longitude = math.NaN() }, "airfield.position", "longitude from"},
		"no runway":           {func(s *Spec) { s.Runways = nil }, "runway", "no runway"},
		"one end":             {func(s *Spec) { s.Runways[0].Ends = s.Runways[0].Ends[:1] }, "runway.0", "this one has 1"},
		"no designator":       {func(s *Spec) { end(s, 0).Designator = "7" }, "runway.0.end.0.designator", "01 to 36"},
		"designator 37":       {func(s *Spec) { end(s, 0).Designator = "37" }, "runway.0.end.0.designator", "01 to 36"},
		"designator 07X":      {func(s *Spec) { end(s, 0).Designator = "07X" }, "runway.0.end.0.designator", "01 to 36"},
		"twice":               {func(s *Spec) { end(s, 1).Designator = "07" }, "runway.0.end.1.designator", "already that of runway.0.end.0"},
		"not opposite":        {func(s *Spec) { end(s, 1).Designator = "24" }, "runway.0.end.1.designator", "18 apart"},
		"sides":               {func(s *Spec) { end(s, 0).Designator, end(s, 1).Designator = "07L", "25L" }, "runway.0.end.1.designator", "L and R"},
		"contradicts bearing": {func(s *Spec) { end(s, 0).Designator, end(s, 1).Designator = "09", "27" }, "runway.0.end.0.designator", "19 degrees from"},
		"exchanged":           {func(s *Spec) { end(s, 0).Designator, end(s, 1).Designator = "25", "07" }, "runway.0.end.0.designator", "exchanged"},
		"too short":           {func(s *Spec) { *end(s, 1) = *end(s, 0); end(s, 1).Designator = "25" }, "runway.0.end.1.threshold", "0 m apart"},
		"threshold far off":   {func(s *Spec) { end(s, 0).Latitude = 53 }, "runway.0.end.0.threshold", "more than 10 km"},
		"no landing path":     {func(s *Spec) { end(s, 0).LandingLength = 0 }, "runway.0.end.0.landing_length", "must be from"},
		"glide path":          {func(s *Spec) { end(s, 0).GlidePath = math.NaN() }, "runway.0.end.0.glide_path", "must be from"},
		"mast 40 km off":      {func(s *Spec) { s.Masts[2].Latitude += 0.36 }, "station.2.position", "more than 15 km"},
		"mast at antipode":    {func(s *Spec) { s.Masts[2].Latitude, s.Masts[2].Longitude = -54, 160 }, "station.2.position", "more than 15 km"},
		"mast exchanged":      {func(s *Spec) { s.Masts[2].Latitude, s.Masts[2].Longitude = -20, 54 }, "station.2.position", "seem to be exchanged"},
		"mast nowhere":        {func(s *Spec) { s.Masts[2].Latitude = math.Inf(1) }, "station.2.position", "latitude must be"},
		"wrong fixed variation": {func(s *Spec) { v := 30.0; s.Variation = &v },
			"runway.0.end.0.designator", "variation 30.0"},
	} {
		spec := skerryMoorSpec(t)
		c.change(&spec)
		a, err := New(spec)
		var faults Faults
		if a != nil || !errors.As(err, &faults) {
			t.Errorf("%s: %v, %v", name, a, err)
			continue
		}
		f := faults[0]
		text := f.Error()
		if f.Field != c.field || !strings.Contains(text, c.phrase) || f.Mend == "" || !strings.Contains(err.Error(), text) {
			t.Errorf("%s: %s", name, text)
		}
	}
}

func TestEveryFaultAtOnce(t *testing.T) {
	spec := skerryMoorSpec(t)
	spec.Masts[0].Latitude, spec.Masts[7].Longitude = 50, 20
	spec.Runways[0].Ends[1].Designator = "x"
	_, err := New(spec)
	var faults Faults
	if !errors.As(err, &faults) || len(faults) != 3 {
		t.Fatalf("%v", err)
	}
	fields := []string{faults[0].Field, faults[1].Field, faults[2].Field}
	if !slices.Equal(fields, []string{"runway.0.end.1.designator", "station.0.position", "station.7.position"}) {
		t.Errorf("%v", fields)
	}
}
