package airfield

import "math"

// Reach and Beyond are how far a mast speaks for the wind: within Reach of it
// in plan, and no more than Beyond past the outermost mast along the path, in
// metres. Reach may be configured; Beyond follows the definition of observed
// ground.
const (
	Reach  = 1000.0
	Beyond = 500.0
)

// seam is the widest gap, in metres, that is taken for rounding.
const seam = 1e-3

// Observed is the ground of a path that live masts observe, from far to near,
// without overlaps: every point within reach metres of a mast in plan and no
// more than beyond metres past the outermost of them along the path, cut to
// the path's Extent.
//
// Outermost counts the masts whose circle of reach meets the Extent, each by
// its projection on the path. A mast farther off sees none of this path, so
// it does not vouch for the ground towards it.
func Observed(path Path, masts []Point, reach, beyond float64) []Interval {
	return AppendObserved(nil, path, masts, reach, beyond)
}

// AppendObserved appends what Observed returns to dst; it allocates only when
// dst is too small (one interval a mast is enough).
func AppendObserved(dst []Interval, path Path, masts []Point, reach, beyond float64) []Interval {
	first := len(dst)
	outer := Interval{From: math.Inf(-1), To: math.Inf(1)}
	for _, m := range masts {
		s, chord, ok := path.seenFrom(m, reach)
		if !ok {
			continue
		}
		outer.From, outer.To = max(outer.From, s), min(outer.To, s)
		dst = append(dst, chord)
	}
	outer.From, outer.To = outer.From+beyond, outer.To-beyond

	// Insertion sort, farthest first: a handful of chords, no allocation.
	found := dst[first:]
	for i := 1; i < len(found); i++ {
		for j := i; j > 0 && found[j].From > found[j-1].From; j-- {
			found[j], found[j-1] = found[j-1], found[j]
		}
	}
	n := first
	for _, f := range found {
		f = outer.clip(f)
		if f.Length() <= 0 {
			continue
		}
		if n > first && f.From >= dst[n-1].To-seam {
			dst[n-1].To = min(dst[n-1].To, f.To)
			continue
		}
		dst[n] = f
		n++
	}
	return dst[:n]
}

// seenFrom is the projection of a mast on the path and the part of the Extent
// within reach of it; false if there is none. The line leaves the circle at
// s -+ sqrt(reach2 - lateral2).
func (p Path) seenFrom(m Point, reach float64) (s float64, chord Interval, ok bool) {
	s, lateral := p.Along(m.X, m.Y)
	h := float64(reach*reach) - float64(lateral*lateral)
	if !(h > 0) {
		return 0, Interval{}, false
	}
	half := math.Sqrt(h)
	chord = p.extent.clip(Interval{From: s + half, To: s - half})
	return s, chord, chord.Length() > 0
}

// Complete tells whether intervals (as Observed gives them) hold every point
// of needed, and if not, which stretches of it they leave out, from far to
// near.
func Complete(intervals []Interval, needed Interval) (bool, []Interval) {
	gaps := AppendGaps(nil, intervals, needed)
	return len(gaps) == 0, gaps
}

// Unobserved is what intervals leave out of the whole path.
func Unobserved(path Path, intervals []Interval) []Interval {
	return AppendGaps(nil, intervals, path.extent)
}

// AppendGaps appends to dst the stretches of within that intervals (sorted
// from far to near, without overlaps) leave out. It allocates only when dst
// is too small.
func AppendGaps(dst, intervals []Interval, within Interval) []Interval {
	at := within.From // everything farther than at is accounted for
	for _, iv := range intervals {
		if iv.To >= at {
			continue
		}
		if at-max(iv.From, within.To) > seam {
			dst = append(dst, Interval{From: at, To: max(iv.From, within.To)})
		}
		if at = min(at, iv.To); at <= within.To {
			return dst
		}
	}
	if at-within.To > seam {
		dst = append(dst, Interval{From: at, To: within.To})
	}
	return dst
}

// MastsBeside is which masts stand within reach metres of a path in plan, as
// ascending indices into masts: those that are missing when they are silent.
func MastsBeside(path Path, masts []Point, reach float64) []int {
	return AppendMastsBeside(nil, path, masts, reach)
}

// AppendMastsBeside appends what MastsBeside returns to dst.
func AppendMastsBeside(dst []int, path Path, masts []Point, reach float64) []int {
	for i, m := range masts {
		if _, _, ok := path.seenFrom(m, reach); ok {
			dst = append(dst, i)
		}
	}
	return dst
}
