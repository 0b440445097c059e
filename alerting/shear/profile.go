package shear

// ProfilePoint is the headwind at one point of a path, for its flight, with
// its 5 and 95 % points, m/s.
type ProfilePoint struct {
	At                  float64 // m before the threshold
	Headwind, Low, High float64
	Observed            bool
}

// Forecast is what the greatest loss and gain of headwind along a path will be
// after a while: low, median and high (5, 50 and 95 % points), m/s as
// magnitudes.
type Forecast struct {
	Seconds    float64
	Loss, Gain [3]float64
}
