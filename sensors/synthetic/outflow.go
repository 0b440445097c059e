package synthetic

import "math"

// Model names the radial shape of an outflow.
type Model string

// The radial shapes.
const (
	ModelOsegueraBowles Model = "oseguera-bowles"
	ModelVicroy         Model = "vicroy"
	ModelHolmesOliver   Model = "holmes-oliver"
)

// Profile names how an outflow's speed depends on height.
type Profile string

// The height profiles. The two NASA fits have a deep smooth layer at the ground
// (10 m has 0.3 to 0.7 of the greatest speed); wall jets and field
// measurements are fuller there (0.8 to 0.9).
const (
	ProfileOsegueraBowles Profile = "oseguera-bowles"
	ProfileVicroy         Profile = "vicroy"
	ProfileWallJet        Profile = "wall-jet"
)

// referenceHeight is the height (m) at which all speeds of a scene are given:
// that of a standard anemometer.
const referenceHeight = 10.0

// outflowHeight is the usual height (m) of the greatest outflow: about 75 m in
// Wilson et al. 1984 (J. Climate Appl. Meteor. 23, 898-915).
const outflowHeight = 75.0

// Outflow is a downburst's wind near the ground. Its strength is given
// directly at mast height (10 m), because a mast is what sees it; the profile
// serves only to carry it to other heights, as the ratio to 10 m.
//
// The pattern moves with Motion but its motion is not added to the wind: the
// mean wind of the scene is the flow in which it drifts.
type Outflow struct {
	Model    Model
	Profile  Profile // "" means that of the model (wall-jet for Holmes and Oliver)
	X, Y     float64 // centre at Starts, m
	Strength float64 // greatest outflow speed at 10 m, m/s, at Radius along Axis; the change from side to side is twice it
	Radius   float64 // of the greatest outflow along Axis, m
	Height   float64 // of the greatest outflow, m; 0 means 75 m
	// Stretch >= 1 makes the pattern an ellipse: across Axis both radius and
	// strength are smaller by it. Outflows are asymmetric, the strong axis on
	// average twice the weak one (Wilson et al. 1984). The map is linear, so
	// that mass is conserved as in the round model.
	Stretch          float64
	Axis             float64 // bearing of the strong axis, degrees true
	MotionX, MotionY float64 // of the centre, m/s
	Spread           float64 // growth of Radius, m/s, from Starts on
	History          History // strength in time
}

// History is the strength of something in time: a linear growth from 0 to 1, a
// plateau and a linear fading, in seconds from the start of the scene.
type History struct{ Starts, Grows, Holds, Fades float64 }

// At is the share of full strength at t, from 0 to 1.
func (h History) At(t float64) float64 {
	t -= h.Starts
	switch {
	case t < 0:
		return 0
	case t < h.Grows:
		return t / h.Grows
	case t <= h.Grows+h.Holds:
		return 1
	case t < h.Grows+h.Holds+h.Fades:
		return 1 - (t-h.Grows-h.Holds)/h.Fades
	}
	return 0
}

// decaying is At with the published exponential decay of Holmes and Oliver in
// place of the linear fading: its time constant is Fades.
func (h History) decaying(t float64) float64 {
	after := t - (h.Starts + h.Grows + h.Holds)
	if after <= 0 || h.Fades <= 0 {
		return h.At(t)
	}
	return math.Exp(-after / h.Fades)
}

// Wind is the outflow's wind at x, y (m) and height z (m), t seconds after the
// start of the scene.
func (o *Outflow) Wind(x, y, z, t float64) (u, v float64) {
	share := o.Share(t)
	if share == 0 {
		return 0, 0
	}
	age := t - o.History.Starts
	x -= o.X + o.MotionX*age
	y -= o.Y + o.MotionY*age
	radius := o.Radius + o.Spread*age
	stretch := max(o.Stretch, 1)
	sin, cos := math.Sincos(o.Axis * (math.Pi / 180))
	// Into axis coordinates, where the ellipse becomes the round pattern.
	along := (x*sin + y*cos) / radius
	across := (x*cos - y*sin) / radius * stretch
	f := share * o.Strength * o.shape(along*along+across*across) * o.heightFactor(z)
	along *= f
	across *= f / stretch
	return along*sin + across*cos, along*cos - across*sin
}

// shape is the radial profile over the relative radius, as a function of the
// relative radius squared: U(r)/(U(rm) r/rm).
func (o *Outflow) shape(square float64) float64 {
	switch o.Model {
	case ModelVicroy:
		// exp((1 - T)/(2 alpha)) with alpha = 2, T = (r/rm)^4
		return math.Exp((1 - square*square) / 4)
	case ModelHolmesOliver:
		if square <= 1 {
			return 1
		}
		rho := math.Sqrt(square)
		d := (rho - 1) / 0.5 // radial length half of the radius, the usual value
		return math.Exp(-d*d) / rho
	}
	return oneMinusExpOver(obPeakSquare*square) / oneMinusExpOver(obPeakSquare)
}

// heightFactor is the outflow at height z over that at 10 m.
func (o *Outflow) heightFactor(z float64) float64 {
	if z == referenceHeight {
		return 1
	}
	return o.profile(z) / o.profile(referenceHeight)
}

// profile is the outflow at height z over its greatest, up to a constant.
func (o *Outflow) profile(z float64) float64 {
	height := o.Height
	if height == 0 {
		height = outflowHeight
	}
	profile := o.Profile
	if profile == "" {
		switch o.Model {
		case ModelVicroy:
			profile = ProfileVicroy
		case ModelHolmesOliver:
			profile = ProfileWallJet
		}
	}
	switch profile {
	case ProfileVicroy:
		return math.Exp(vicroyC1*z/height) - math.Exp(vicroyC2*z/height)
	case ProfileWallJet:
		return woodProfile(z / (5 * height)) // d = 5 zm puts the peak near zm
	}
	scale := height / obPeakHeight
	return math.Exp(-z/scale) - math.Exp(-z/(obLayer*scale))
}

// Share is how much of the full strength has come at t, from 0 to 1, seconds
// from the start of the scene.
func (o *Outflow) Share(t float64) float64 {
	if o.Model == ModelHolmesOliver {
		return o.History.decaying(t)
	}
	return o.History.At(t)
}

// Centre is where the outflow stands at t, m.
func (o *Outflow) Centre(t float64) (x, y float64) {
	age := t - o.History.Starts
	return o.X + o.MotionX*age, o.Y + o.MotionY*age
}
