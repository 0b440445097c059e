package airfield

import (
	"fmt"
	"testing"
)

// The rule is that of 100 m in plan; 0.0009 degrees of latitude are 100.2 m at
// 54 N (the meridian of WGS-84 has 111,312 m a degree there).
func TestColumns(t *testing.T) {
	const near, far = 0.0008, 0.0010
	mast := func(id string, north, height float64) MastSpec {
		return MastSpec{ID: id, Latitude: 54 + north, Longitude: -20, Height: height}
	}
	for _, c := range []struct {
		name           string
		masts          []MastSpec
		columns, aloft string
	}{
		{"one mast", []MastSpec{mast("a", 0, 10)}, "[]", "[false]"},
		{"two levels of a tower", []MastSpec{mast("a", 0, 10), mast("b", 0, 40)}, "[[0 1]]", "[false true]"},
		{"the upper one first", []MastSpec{mast("b", 0, 40), mast("a", 0, 10)}, "[[1 0]]", "[true false]"},
		{"three levels, the middle one at 10 m", []MastSpec{mast("a", 0, 4), mast("b", 0, 10), mast("c", 0, 30)}, "[[0 1 2]]", "[true false true]"},
		{"89 m apart", []MastSpec{mast("a", 0, 10), mast("b", near, 40)}, "[[0 1]]", "[false true]"},
		{"111 m apart", []MastSpec{mast("a", 0, 10), mast("b", far, 40)}, "[]", "[false false]"},
		{"two at one height", []MastSpec{mast("a", 0, 10), mast("b", 0, 10)}, "[]", "[false false]"},
		{"2 m higher is no level", []MastSpec{mast("a", 0, 10), mast("b", 0, 12)}, "[]", "[false false]"},
		{"two towers", []MastSpec{mast("a", 0, 10), mast("b", 0.02, 10), mast("c", 0.02, 45), mast("d", 0, 25)}, "[[0 3] [1 2]]", "[false false true true]"},
	} {
		t.Run(c.name, func(t *testing.T) {
			a := &Airfield{plane: NewPlane(54, -20, 0)}
			for _, m := range c.masts {
				a.Masts = append(a.Masts, Mast{ID: m.ID, Height: m.Height, Point: a.Locate(m.Latitude, m.Longitude)})
			}
			if got := fmt.Sprint(a.Columns()); got != c.columns {
				t.Errorf("columns %s, want %s", got, c.columns)
			}
			if got := fmt.Sprint(a.Aloft()); got != c.aloft {
				t.Errorf("aloft %s, want %s", got, c.aloft)
			}
		})
	}
}
