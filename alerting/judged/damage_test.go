package judged

import (
	"math/rand/v2"
	"testing"

	"sockline/alerting"
	"sockline/alerting/hazard"
	"sockline/alerting/lifecycle"
	"sockline/alerting/shear"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// twoPaths is a context of two paths over one ground, and rules for it.
func twoPaths() (Context, hazard.Levels) {
	l := hazard.Levels{Noticeable: 10 * quantity.Knot, Large: 15 * quantity.Knot, Margin: 17.2 * quantity.Knot, Hysteresis: 2 * quantity.Knot, Confidence: 0.8}
	return Context{Paths: make([]lifecycle.PathName, 2), Owners: []int{0, 0}, Stations: []string{"a", "b"}, Thresholds: Thresholds(l), Without: true}, l
}

// filled is a block of steps with losses and gains drawn at random.
func filled(tb testing.TB, c Context, seed uint64) (b *block, want [][2]hazard.Change) {
	tb.Helper()
	random := rand.New(rand.NewPCG(seed, 1))
	r := newRecorder(c, func(done *block) { b = done })
	s := shear.NewStretch([]int{0, 1, 2})
	middle := 3.0
	for n := range BlockSteps {
		middle = max(1, min(40, middle+random.NormFloat64()))
		spread := 0.5 + 3*random.Float64()
		for i := range s.Loss.Sorted {
			at := float64(i) / float64(len(s.Loss.Sorted))
			s.Loss.Sorted[i] = max(0, middle+spread*(at-0.5)*4) * quantity.Knot
			s.Gain.Sorted[i] = s.Loss.Sorted[i] / 2
		}
		looks := make([]Look, 2)
		for i := range looks {
			a := &hazard.Assessment{Path: i, Complete: n%100 < 90}
			if n%50 < 45 {
				a.Observed = append(a.Observed, interval([2]int32{40000, -10000}))
				a.Loss.From, a.Loss.To = float64(n%7)*200, -float64(n%3)*200
				looks[i].Stretch = s
			}
			looks[i].Found = a
		}
		r.Take(sensors.Instant(1782914400000+1000*n), looks)
		var w [2]hazard.Change
		for level, change := range map[alerting.Level]float64{alerting.Noticeable: 10, alerting.Large: 15} {
			w[0].Probability[level], w[1].Probability[level] = s.Loss.AtLeast(change*quantity.Knot), s.Gain.AtLeast(change*quantity.Knot)
		}
		want = append(want, w)
	}
	r.Flush()
	return b, want
}

// TestBlockComesBack holds that a block comes back as it was written: each
// probability of at least one half to the draw, whatever the draws.
func TestBlockComesBack(t *testing.T) {
	c, l := twoPaths()
	for seed := range uint64(6) {
		b, want := filled(t, c, seed)
		body := b.encode()
		got, err := decodeBlock(&c, body)
		if err != nil {
			t.Fatal(err)
		}
		j, err := NewJudge(&c, l)
		if err != nil {
			t.Fatal(err)
		}
		for n := range got.rows {
			as := j.Assess(&Step{Context: &c, block: got, row: &got.rows[n]}, nil)
			if seen := n%50 < 45; (len(as[0].Observed) > 0) != seen || as[0].Complete != (n%100 < 90) {
				t.Fatalf("seed %d, step %d: %+v", seed, n, as[0])
			} else if !seen {
				continue
			}
			if as[1].Loss.From != float64(n%7)*200 || as[1].Loss.To != -float64(n%3)*200 {
				t.Fatalf("seed %d, step %d: from %v to %v", seed, n, as[1].Loss.From, as[1].Loss.To)
			}
			for _, level := range []alerting.Level{alerting.Noticeable, alerting.Large} {
				for i, p := range []float64{as[0].Loss.Probability[level], as[1].Gain.Probability[level]} {
					w := want[n][i].Probability[level]
					if w < 0.5 {
						w = 0 // is not kept
					}
					if p != w {
						t.Fatalf("seed %d, step %d, level %s: %v, want %v", seed, n, level, p, w)
					}
				}
			}
		}
	}
}

// TestNonsenseIsRefused holds that a block whose checksum is right and whose
// content is not never brings the reader down.
func TestNonsenseIsRefused(t *testing.T) {
	c, l := twoPaths()
	b, _ := filled(t, c, 7)
	body := b.encode()
	random := rand.New(rand.NewPCG(1, 2))
	refused := 0
	for range 1000 {
		bad := append([]byte{}, body...)
		for range 1 + random.IntN(3) {
			bad[random.IntN(len(bad))] = byte(random.Uint32())
		}
		if random.IntN(4) == 0 {
			bad = bad[:random.IntN(len(bad))]
		}
		got, err := decodeBlock(&c, bad)
		if err != nil {
			refused++
			continue
		}
		j, err := NewJudge(&c, l)
		if err != nil {
			t.Fatal(err)
		}
		var as []hazard.Assessment
		for n := range got.rows {
			as = j.Assess(&Step{Context: &c, block: got, row: &got.rows[n]}, as)
		}
	}
	if refused == 0 {
		t.Error("nothing was refused: this looks in the wrong place")
	}
}
