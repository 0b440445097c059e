package drift

import (
	"math"
	"math/rand/v2"
	"testing"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// days gives a Siting so many days of ten-minute winds from a direction, m/s;
// the second of four masts tells a wind turned by turn degrees and ratio times
// as strong.
func days(s *Siting, from sensors.Instant, n int, direction, speed, turn, ratio float64, rng *rand.Rand) (tables [][]byte, end sensors.Instant) {
	t := from
	for range n * 144 {
		t += 600 * sensors.Second
		means := make([]Mean, 4)
		common := quantity.FromDirection(speed, direction+2*rng.NormFloat64())
		for i := range means {
			v := common
			if i == 1 {
				v = quantity.FromDirection(v.Speed()*ratio, v.From()+turn)
			}
			v.East += 0.3 * rng.NormFloat64()
			v.North += 0.3 * rng.NormFloat64()
			means[i] = Mean{Present: true, Vector: v, Speed: v.Speed()}
		}
		s.Take(means)
		if t%(3600*sensors.Second) == 0 {
			if table := s.Turn(t); table != nil {
				tables = append(tables, table)
			}
		}
	}
	return tables, t
}

const monday = sensors.Instant(1782777600000) // 2026-06-30T00:00:00Z, a whole UTC day

func fourIDs() []string { return []string{"a", "b", "c", "d"} }

// A mast whose place turns the wind by 10 degrees and slows it to 80 %: learnt
// within a week, for the directions that it has blown from and no others.
func TestSitingIsLearnt(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 6))
	s := NewSiting(fourIDs(), make([]bool, 4))
	tables, end := days(s, monday, 7, 240, 8, 10, 0.8, rng)
	got := s.InForce(end)
	sector := int(math.Round(250.0 / 30)) // as the mast measures it
	if !got[1].On || math.Abs(got[1].Turned[sector]-10) > 1.5 || math.Abs(got[1].LogRatio[sector]-math.Log(0.8)) > 0.04 {
		t.Errorf("sector %d: %+v", sector, got[1])
	}
	for i, g := range got {
		for k := range g.Turned {
			// The median of three of which one is biased moves by part of their noise.
			if i != 1 && (math.Abs(g.Turned[k]) > 1.5 || math.Abs(g.LogRatio[k]) > 0.06) || k > 1 && k < 6 && g.Turned[k] != 0 {
				t.Errorf("mast %d, sector %d: turned %.2f, ratio %.3f", i, k, g.Turned[k], g.LogRatio[k])
			}
		}
	}

	// The journal gives the same to another run, in any order, and twice.
	again := NewSiting(fourIDs(), make([]bool, 4))
	for _, k := range rng.Perm(len(tables)) {
		for range 2 {
			if err := again.Load(tables[k]); err != nil {
				t.Fatal(err)
			}
		}
	}
	if other := again.InForce(end); other[1] != got[1] || other[0] != got[0] {
		t.Errorf("read back: %+v, learnt: %+v", other[1], got[1])
	}
	// An earlier day knows only what came before it.
	if early := again.InForce(monday + 2*aDay); early[1].On {
		t.Errorf("after two days: %+v", early[1])
	}
}

// Too little, too light, too restless, or too much to be a site: nothing is
// removed.
func TestSitingHoldsBack(t *testing.T) {
	for _, c := range []struct {
		name        string
		days        int
		speed, turn float64
		out         []bool
	}{
		{"three days", 3, 8, 10, make([]bool, 4)}, {"light air", 10, 3, 10, make([]bool, 4)},
		{"a turned instrument", 10, 8, 35, make([]bool, 4)}, {"a mast aloft", 10, 8, 10, []bool{false, true, false, false}},
	} {
		s := NewSiting(fourIDs(), c.out)
		_, end := days(s, monday, c.days, 240, c.speed, c.turn, 1, rand.New(rand.NewPCG(7, 8)))
		if got := s.InForce(end)[1]; got.On {
			t.Errorf("%s: %+v", c.name, got)
		}
	}
}

func TestSitingRefusesDamage(t *testing.T) {
	s := NewSiting(fourIDs(), make([]bool, 4))
	for _, bad := range []string{`{`, `{"hour_ms":1,"masts":{"a":{"12":{"n":1}}}}`, `{"hour_ms":1,"masts":{"a":{"x":{"n":1}}}}`,
		`{"hour_ms":1,"masts":{"a":{"1":{"n":99}}}}`, `{"hour_ms":1,"masts":{"a":{"1":{"n":3,"log_ratio":1000}}}}`} {
		if err := s.Load([]byte(bad)); err == nil {
			t.Errorf("%s is accepted", bad)
		}
	}
}
