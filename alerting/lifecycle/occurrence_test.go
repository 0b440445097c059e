package lifecycle

import (
	"math"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/hazard"
)

func TestOccurrences(t *testing.T) {
	one := change(12, alerting.Noticeable, alerting.Noticeable)
	type event struct {
		after    int // s
		path     int
		from, to float64
	}
	const first, second = "skerrymoor-20260701T141503Z", "skerrymoor-20260701T141503Z-2"
	for _, c := range []struct {
		name   string
		events []event
		want   []string // occurrences, in the order of opening
	}{
		// The threshold of 25 lies 1280 m beyond that of 07: what is 1250 m
		// before 07 on landing is 2530 m from the start of the roll on 25.
		{"landing 07 and take-off 25 over the same ground",
			[]event{{0, 0, 2900, 1250}, {30, 3, -2600, -4000}}, []string{first, first}},
		{"landing 07 and take-off 25 at opposite ends of the aerodrome",
			[]event{{0, 0, 2900, 1250}, {30, 3, 0, -600}}, []string{first, "skerrymoor-20260701T141533Z"}},
		{"the same ground, 60 s apart",
			[]event{{0, 0, 2900, 1250}, {60, 3, -2600, -4000}}, []string{first, first}},
		{"the same ground, 61 s apart",
			[]event{{0, 0, 2900, 1250}, {61, 3, -2600, -4000}}, []string{first, "skerrymoor-20260701T141604Z"}},
		{"unrelated, in the same second",
			[]event{{0, 0, 2900, 1250}, {0, 2, 2900, 1250}}, []string{first, second}},
		{"a third joins the second, not the first",
			[]event{{0, 0, 2900, 1250}, {0, 2, 2900, 1250}, {20, 1, -3000, -4000}}, []string{first, second, second}},
		{"one that overlaps two joins the earlier",
			[]event{{0, 2, 2900, 1250}, {10, 0, 2900, 1250}, {20, 1, 1000, -2600}}, []string{first, "skerrymoor-20260701T141513Z", first}},
		// Places 499 and 501 m apart along one centreline: 1250 - 751 = 499.
		{"499 m apart", []event{{0, 0, 2900, 1250}, {10, 1, 751, 400}}, []string{first, first}},
		{"501 m apart", []event{{0, 0, 2900, 1250}, {10, 1, 749, 400}}, []string{first, "skerrymoor-20260701T141513Z"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			m := New(skerry())
			var got []string
			for s := 0; s <= c.events[len(c.events)-1].after; s++ {
				as := make([]hazard.Assessment, 4)
				for p := range as {
					as[p] = hazard.Assessment{Path: p, Observed: whole}
				}
				for _, e := range c.events {
					as[e.path].Observed = append(whole[:0:0], whole[0])
					as[e.path].Observed[0].To = -6280
					if s >= e.after {
						as[e.path].Loss = at(e.from, e.to, one)
					}
				}
				for _, tr := range m.Step(start.Add(time.Duration(s)*time.Second), as, nil) {
					if tr.Alert.Revision == 1 {
						got = append(got, tr.Alert.Occurrence)
					}
				}
			}
			if len(got) != len(c.want) {
				t.Fatalf("%d openings, want %d", len(got), len(c.want))
			}
			for i := range got {
				if got[i] != c.want[i] {
					t.Errorf("opening %d: occurrence %s, want %s", i+1, got[i], c.want[i])
				}
			}
		})
	}
}

// An alert that has closed may still be joined within the window.
func TestOccurrenceOfAClosedAlert(t *testing.T) {
	settings := skerry()
	settings.Hold = 5 * time.Second
	m := New(settings)
	one := change(12, alerting.Noticeable, alerting.Noticeable)
	step := func(s int, loss hazard.Change) []Transition {
		return m.Step(start.Add(time.Duration(s)*time.Second), []hazard.Assessment{{Path: 0, Observed: whole, Loss: loss}}, nil)
	}
	opened := step(0, one)[0].Alert
	step(5, change(4, 0, 0))
	if m.Raised(0) {
		t.Fatal("still open after the hold")
	}
	again := step(20, one)[0].Alert
	if again.ID == opened.ID || again.Occurrence != opened.Occurrence {
		t.Errorf("id %s then %s, occurrence %s then %s", opened.ID, again.ID, opened.Occurrence, again.Occurrence)
	}
	step(25, change(4, 0, 0))
	if late := step(100, one)[0].Alert; late.Occurrence == opened.Occurrence {
		t.Error("joined after the window")
	}
}

// Distances of two pieces of ground, by hand.
func TestPlaceDistance(t *testing.T) {
	base := place{0, 0, 1000, 0}
	for _, c := range []struct {
		name  string
		other place
		want  float64
	}{
		{"crossing", place{500, -100, 500, 100}, 0},
		{"touching at an end", place{1000, 0, 1000, 500}, 0},
		{"overlapping on one line", place{900, 0, 2000, 0}, 0},
		{"parallel", place{0, 300, 1000, 300}, 300},
		{"beyond the end, 3-4-5", place{1300, 400, 2000, 400}, 500},
		{"a T that does not reach", place{500, 200, 500, 900}, 200},
		{"a point", place{-30, 40, -30, 40}, 50},
	} {
		for _, pair := range [][2]place{{base, c.other}, {c.other, base}} {
			if got := pair[0].distance(pair[1]); math.Abs(got-c.want) > 1e-9 {
				t.Errorf("%s: %v m, want %v", c.name, got, c.want)
			}
		}
	}
}

// On bearing 070 a point 1000 m before the threshold lies 1000 sin 70 = 939.7
// m west and 1000 cos 70 = 342.0 m south of it.
func TestPlaceOnTheGround(t *testing.T) {
	m := New(Settings{Paths: []PathName{{Runway: "07", Operation: "landing", East: 100, North: 50, Bearing: 70}}})
	p := m.place(0, 1000, -1000)
	want := place{100 - 939.693, 50 - 342.020, 100 + 939.693, 50 + 342.020}
	for i, d := range []float64{p.x0 - want.x0, p.y0 - want.y0, p.x1 - want.x1, p.y1 - want.y1} {
		if math.Abs(d) > 0.001 {
			t.Errorf("coordinate %d off by %v m", i, d)
		}
	}
}
