package airfield

// Interval is a stretch of a path: From is where the flight enters it, To
// where it leaves it, both in metres before the path's threshold (negative:
// beyond it), so From >= To.
type Interval struct{ From, To float64 }

// Length is From - To, in metres.
func (i Interval) Length() float64 { return i.From - i.To }

// Contains tells whether s metres before the threshold lies in the interval,
// its ends included.
func (i Interval) Contains(s float64) bool { return s <= i.From && s >= i.To }

// clip is the part of j inside i. Where they do not meet, its Length is
// negative.
func (i Interval) clip(j Interval) Interval {
	return Interval{From: min(i.From, j.From), To: max(i.To, j.To)}
}
