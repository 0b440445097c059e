package shear

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"golang.org/x/sys/cpu"

	"sockline/alerting/windfield"
	"sockline/sensors/quantity"
)

// plain is the definition of M, searched pair by pair: the greatest fall and
// rise of the headwind from an observed point to a later one at most 4 km on,
// and the same between points exactly 1 km apart.
func plain(line []float64, observed []bool) (fall, rise, fallKm float64) {
	for i := range line {
		for j := i + 1; j < len(line); j++ {
			length := float64(j-i) * Spacing
			if !observed[i] || !observed[j] || length > 4000 {
				continue
			}
			fall, rise = max(fall, line[i]-line[j]), max(rise, line[j]-line[i])
			if length == 1000 {
				fallKm = max(fallKm, line[i]-line[j])
			}
		}
	}
	return fall, rise, fallKm
}

// The fast search finds what the plain one finds, on profiles of every length
// around the width of its blocks, with any ground not observed.
func TestExtremesAgainstPlainSearch(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for n := 2; n <= 3*(reachPoints+1)+2; n++ {
		for trial := range 30 {
			s := NewStretch(make([]int, n))
			share := []float64{0, 0.1, 0.5, 0.9}[trial%4] // not observed
			for i := range n {
				s.line[i] = rng.NormFloat64()*8 + 5*math.Sin(float64(i)/3)
				s.Observed[i] = rng.Float64() >= share
			}
			fall, rise, fallKm := plain(s.line, s.Observed)
			s.lookUp()
			gotFall, gotRise := s.extremes(s.line)
			gotFallKm := s.kilometre(s.line)
			// Differences of the same two numbers: equal to the bit.
			if gotFall != fall || gotRise != rise {
				t.Fatalf("%d points, trial %d: fall %g and rise %g, the plain search finds %g and %g", n, trial, gotFall, gotRise, fall, rise)
			}
			if gotFallKm != fallKm {
				t.Fatalf("%d points, trial %d: over 1 km %g, the plain search finds %g", n, trial, gotFallKm, fallKm)
			}
		}
	}
}

// Several draws at a time give the bits of one after the other, on lines of every
// length with the ends not observed, with steps, level ground and zeros of both
// signs; a gap within goes the slow way.
func TestMeasureSeveralDraws(t *testing.T) {
	rng := rand.New(rand.NewPCG(11, 12))
	fast := 0
	for n := 2; n <= 3*reachPoints+7; n++ {
		for trial := range 12 {
			const before, after = 3, 2
			s := all(NewStretch(upTo(n)))
			for i := range s.Points {
				s.Points[i] += before
			}
			s.first = before
			for i := range rng.IntN(n) * (trial % 3) / 3 {
				s.Observed[i] = false
			}
			s.Observed[n-1] = trial%4 != 1
			if trial == 11 {
				s.Observed[n/2] = false
			}
			p := posterior(func(_, i int) float64 {
				if trial%5 == 0 {
					return []float64{0, math.Copysign(0, -1), 1, -1}[rng.IntN(4)]
				}
				return rng.NormFloat64()*4 + 3*math.Sin(float64(i)/3)
			}, before+n+after)
			s.Measure(p)
			loss, gain, kilometre := slices.Clone(s.Loss.joint), slices.Clone(s.Gain.joint), slices.Clone(s.jointKilometre)
			if s.measureFast(p.Draws, len(p.Mean)) {
				fast++
			}
			s.measureEach(p.Draws, len(p.Mean))
			for d := range windfield.Draws {
				for _, pair := range [][2]float64{{loss[d], s.Loss.joint[d]}, {gain[d], s.Gain.joint[d]}, {kilometre[d], s.jointKilometre[d]}} {
					if bits(pair[0]) != bits(pair[1]) {
						t.Fatalf("%d points, trial %d, draw %d: %g, one by one %g", n, trial, d, pair[0], pair[1])
					}
				}
			}
		}
	}
	if fast == 0 && cpu.X86.HasAVX2 {
		t.Error("no case went the fast way")
	}
}

// What cannot be seen cannot be part of a change, however large it would be.
func TestUnobservedPointsDoNotCount(t *testing.T) {
	s := NewStretch(make([]int, 12))
	for i := range s.line {
		s.line[i] = 1
		s.Observed[i] = i != 5
	}
	s.line[5] = 40
	s.lookUp()
	if fall, rise := s.extremes(s.line); fall != 0 || rise != 0 {
		t.Errorf("a peak on ground that is not observed counts: fall %g, rise %g", fall, rise)
	}
	// The ground between two observed points need not be observed.
	s.line[4], s.line[6] = 9, 2
	if fall, _ := s.extremes(s.line); fall != 8 {
		t.Errorf("the fall across the gap is %g, want 8", fall)
	}
}

// posterior with these draws and their mean.
func posterior(draws func(d, t int) float64, targets int) *windfield.Posterior {
	p := &windfield.Posterior{Mean: make([]float64, targets), Draws: make([]float64, windfield.Draws*targets)}
	for d := range windfield.Draws {
		for i := range targets {
			v := draws(d, i)
			p.Draws[d*targets+i] = v
			p.Mean[i] += v / windfield.Draws
		}
	}
	return p
}

func all(s *Stretch) *Stretch {
	for i := range s.Observed {
		s.Observed[i] = true
	}
	return s
}

// M is taken in every draw before its distribution: when each draw has its
// change in another place, the mean profile shows little of it, M all.
func TestMeasureTakesTheMaximumInEachDraw(t *testing.T) {
	const n = 16
	points := make([]int, n)
	for i := range points {
		points[i] = n - 1 - i // the stretch runs against the order of the targets
	}
	s := all(NewStretch(points))
	p := posterior(func(d, target int) float64 {
		at := n - 1 - target // place along the stretch
		if at == d%(n-1) {
			return 10
		}
		return 0
	}, n)
	s.Measure(p)
	for _, q := range []float64{0, 0.05, 0.5, 0.95, 1} {
		if got := s.Loss.Quantile(q); got != 10 {
			t.Errorf("the %g point of the loss is %g; every draw has a fall of 10", q, got)
		}
	}
	if most := slices.Max(s.Mean); most > 1 {
		t.Fatalf("the mean profile rises to %g; this test is to have it flat", most)
	}
	if s.Loss.AtLeast(10) != 1 || s.Loss.AtLeast(10.001) != 0 {
		t.Errorf("P(M >= 10) = %g, P(M >= 10.001) = %g; want 1 and 0", s.Loss.AtLeast(10), s.Loss.AtLeast(10.001))
	}
}

// The distribution of M is that of the draws: quantiles by linear
// interpolation between order statistics (R.J. Hyndman, Y. Fan, "Sample
// quantiles in statistical packages", The American Statistician 50, 1996,
// definition 7; from memory), probabilities by counting.
func TestQuantilesAndProbabilities(t *testing.T) {
	const n = 2
	s := all(NewStretch([]int{0, 1}))
	// The falls are 0, 1, ... Draws-1, in scrambled order.
	p := posterior(func(d, i int) float64 {
		if i == 0 {
			return float64((d * 37) % windfield.Draws) // 37 and 128 have no common factor
		}
		return 0
	}, n)
	s.Measure(p)
	last := float64(windfield.Draws - 1)
	for _, q := range []float64{0, 0.05, 0.25, 0.5, 0.8, 0.95, 1} {
		if got, want := s.Loss.Quantile(q), q*last; math.Abs(got-want) > 1e-9 {
			t.Errorf("quantile %g is %g, want %g", q, got, want)
		}
	}
	for _, limit := range []float64{-1, 0, 0.5, 1, 64, last, last + 0.5} {
		want := float64(windfield.Draws-max(int(math.Ceil(limit)), 0)) / windfield.Draws
		if got := s.Loss.AtLeast(limit); got != want {
			t.Errorf("P(M >= %g) = %g, want %g", limit, got, want)
		}
	}
	if s.Gain.Quantile(1) != 0 {
		t.Errorf("no draw rises, yet the greatest gain is %g", s.Gain.Quantile(1))
	}
}

// Either needs both in one draw: counted, not multiplied.
func TestEitherAtLeast(t *testing.T) {
	const n = 21 // 4 km
	s := all(NewStretch(upTo(n)))
	p := posterior(func(d, i int) float64 {
		switch {
		case d < 32: // a long, gentle fall: large M, little over 1 km
			return 12 - 12*float64(i)/20
		case d < 64: // a short, steep one
			if i < 10 {
				return 6
			}
			return 0
		}
		return 0
	}, n)
	s.Measure(p)
	tests := []struct{ change, kilometre, want float64 }{
		{10, 5, 0.5},    // the first quarter by its change, the second by its kilometre
		{10, 100, 0.25}, // by change alone
		{100, 5, 0.25},  // by the kilometre alone
		{5, 2, 0.5},     // some by both: counted once
		{100, 100, 0},
	}
	for _, test := range tests {
		if got := s.EitherAtLeast(test.change, test.kilometre); got != test.want {
			t.Errorf("P(loss >= %g or over 1 km >= %g) = %g, want %g", test.change, test.kilometre, got, test.want)
		}
	}
}

func upTo(n int) []int {
	points := make([]int, n)
	for i := range points {
		points[i] = i
	}
	return points
}

// Among changes within 0.05 kt of the greatest, the pair whose far end is
// nearest the threshold wins, then the shorter.
func TestPlaceTies(t *testing.T) {
	const kt = quantity.Knot
	tests := []struct {
		name       string
		far        float64   // m before the threshold, of the first point
		profile    []float64 // headwind, kt
		enter, end int
	}{
		{"one fall", 1000, []float64{5, 5, 0, 0}, 1, 2},
		{"equal falls: the nearer to the threshold", 1400, []float64{5, 0, 5, 0, 5, 5, 5}, 2, 3},
		{"equal falls on both sides of the threshold: by the distance of the far end",
			400, []float64{5, 0, 0, 0, 5, 0}, 0, 1},
		{"same far end: the shorter", 600, []float64{5, 0, 0, 0}, 0, 1},
		{"0.04 kt less counts as equal", 1400, []float64{5.04, 0, 5, 0, 0}, 2, 3},
		{"0.06 kt less does not", 1400, []float64{5.06, 0, 5, 0, 0}, 0, 1},
	}
	for _, test := range tests {
		t.Run(test.name, func(t *testing.T) {
			n := len(test.profile)
			s := all(NewStretch(upTo(n)))
			before := make([]float64, n)
			p := posterior(func(_, i int) float64 { return test.profile[i] * kt }, n)
			for i := range n {
				before[i] = test.far - Spacing*float64(i)
			}
			s.Measure(p)
			if got := s.Place(&s.Loss, before); got.Enter != test.enter || got.End != test.end {
				t.Errorf("from point %d to %d, want %d to %d", got.Enter, got.End, test.enter, test.end)
			}
			// A gain is the same with the sign turned.
			for i := range s.Mean {
				s.Mean[i] = -s.Mean[i]
			}
			s.Gain.Sorted = s.Loss.Sorted
			if got := s.Place(&s.Gain, before); got.Enter != test.enter || got.End != test.end {
				t.Errorf("the gain: from point %d to %d, want %d to %d", got.Enter, got.End, test.enter, test.end)
			}
		})
	}
}

// Place against a plain search over random profiles: no pair changes more, and
// none as great has its far end nearer or, that far, is shorter.
func TestPlaceAgainstPlainSearch(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	for trial := range 300 {
		n := 2 + rng.IntN(50)
		s := NewStretch(upTo(n))
		before := make([]float64, n)
		for i := range n {
			s.Mean[i] = math.Round(rng.NormFloat64() * 3) // whole numbers make ties
			s.Observed[i] = rng.Float64() < 0.8
			before[i] = 3000 - Spacing*float64(i)
		}
		s.Observed[0], s.Observed[n-1] = true, true
		if float64(n-1)*Spacing > 4000 { // keep at least one pair within 4 km
			s.Observed[1] = true
		}
		got := s.Place(&s.Loss, before)
		score := func(i, j int) (change, far, length float64) {
			return s.Mean[i] - s.Mean[j], max(math.Abs(before[i]), math.Abs(before[j])), before[i] - before[j]
		}
		gotChange, gotFar, gotLength := score(got.Enter, got.End)
		for i := range n {
			for j := i + 1; j < n && before[i]-before[j] <= 4000; j++ {
				if !s.Observed[i] || !s.Observed[j] {
					continue
				}
				change, far, length := score(i, j)
				if change > gotChange || change == gotChange && (far < gotFar || far == gotFar && length < gotLength) {
					t.Fatalf("trial %d: found %d to %d (change %g, far end %g m, %g m long), better is %d to %d (%g, %g m, %g m)",
						trial, got.Enter, got.End, gotChange, gotFar, gotLength, i, j, change, far, length)
				}
			}
		}
		if want := max(gotChange, 0); got.Change != want {
			t.Fatalf("trial %d: the change of the place is %g, its ends differ by %g", trial, got.Change, gotChange)
		}
	}
}

// The greatest slope over 1000 ft of a known profile, and its scaling to the
// median of M.
func TestMaxSlope(t *testing.T) {
	const n = 16
	profile := func(i int) float64 { // a fall of 6 m/s between 1 and 1.6 km, gentle before
		switch {
		case i <= 5:
			return 8 - 0.1*float64(i)
		case i <= 8:
			return 7.5 - 2*float64(i-5)
		}
		return 1.5
	}
	s := all(NewStretch(upTo(n)))
	before := make([]float64, n)
	for i := range n {
		before[i] = 3000 - Spacing*float64(i)
	}
	s.Measure(posterior(func(_, i int) float64 { return profile(i) }, n))
	// 2 m/s in 200 m; the steepest 304.8 m lie wholly within it. Draws and mean
	// agree, so the median of M is the change of the place.
	if got := s.Place(&s.Loss, before); math.Abs(got.MaxSlope-0.01) > 1e-9 {
		t.Errorf("greatest slope %g 1/s, want 0.01", got.MaxSlope)
	}
	// With M twice the change of the mean profile, so is the slope.
	for d := range s.Loss.Sorted {
		s.Loss.Sorted[d] *= 2
	}
	if got := s.Place(&s.Loss, before); math.Abs(got.MaxSlope-0.02) > 1e-9 {
		t.Errorf("scaled to M, the greatest slope is %g 1/s, want 0.02", got.MaxSlope)
	}
}

// Measuring a step allocates nothing.
func TestMeasureAllocatesNothing(t *testing.T) {
	const n = 46
	s := all(NewStretch(upTo(n)))
	rng := rand.New(rand.NewPCG(5, 6))
	p := posterior(func(_, _ int) float64 { return rng.NormFloat64() }, n)
	if got := testing.AllocsPerRun(10, func() { s.Measure(p) }); got != 0 {
		t.Errorf("Measure allocates %g times", got)
	}
}

// One path of 9 km: as smooth as the wind field draws it, and, for the worst
// case, with no two points alike.
func BenchmarkMeasure(b *testing.B) {
	const n = 46
	rng := rand.New(rand.NewPCG(7, 8))
	for _, row := range []struct {
		name string
		draw func(phase [2]float64, i int) float64
	}{
		{"smooth", func(phase [2]float64, i int) float64 {
			return 3*math.Sin(float64(i)/4+phase[0]) + 2*math.Sin(float64(i)/7+phase[1])
		}},
		{"rough", func([2]float64, int) float64 { return rng.NormFloat64() }},
	} {
		phases := make([][2]float64, windfield.Draws)
		for d := range phases {
			phases[d] = [2]float64{rng.Float64() * 7, rng.Float64() * 7}
		}
		b.Run(row.name, func(b *testing.B) {
			s := all(NewStretch(upTo(n)))
			p := posterior(func(d, i int) float64 { return row.draw(phases[d], i) }, n)
			for b.Loop() {
				s.Measure(p)
			}
		})
	}
}
