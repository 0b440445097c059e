package airfield

// Interval is a stretch of a path: From is where the flight enters it, To
// where it leaves it, both in metres before the path's threshold (negative:
// beyond it), so From >= To.
type Interval struct{ From, To float64 }
