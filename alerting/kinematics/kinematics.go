// Package kinematics takes the winds of three or more masts and gives the
// linear field through them: divergence, vorticity, deformation, and their
// standard errors. Next: outflow, by way of windfield.
package kinematics

import "math"

// Wind is the wind (m/s toward east and north) at a place (m east and north).
type Wind struct{ X, Y, U, V float64 }

// Field is a linear wind field: U0 and V0 (m/s) at the origin of the places,
// and its gradients (1/s).
type Field struct {
	U0, V0         float64
	UX, UY, VX, VY float64
	N              int
	// Deviation is the residual standard deviation of one component, m/s, with
	// 2(N-3) degrees of freedom; 0 for three masts.
	Deviation float64
	// Shape is twice the area of the ellipse of the places over the square of
	// its long axis: 1 for a round set, 0 for masts in a line. Below 0.3 the
	// errors are many times those of a well spread set.
	Shape float64

	sxx, sxy, syy, det float64 // of the places about their middle
}

// Fit fits a linear field by least squares: with centroid coordinates and
// det = Sxx Syy - Sxy2, u_x = (Syy Sxu - Sxy Syu)/det and u_y = (Sxx Syu - Sxy
// Sxu)/det. For three masts it is the same as the method of the triangle's
// growing area (J.C. Bellamy, "Objective calculations of divergence, vertical
// velocity and vorticity", Bull. Amer. Meteor. Soc. 30, 1949) and as the line
// integral about it (R. Davies-Jones, "Useful formulas for computing
// divergence, vorticity, and their errors from three or more stations", Mon.
// Wea. Rev. 121, 1993). It says no for fewer than three and for masts in a line.
func Fit(ws []Wind) (Field, bool) {
	f := Field{N: len(ws)}
	if f.N < 3 {
		return f, false
	}
	n := float64(f.N)
	var x, y, u, v float64
	for _, w := range ws {
		x, y, u, v = x+w.X, y+w.Y, u+w.U, v+w.V
	}
	x, y, u, v = x/n, y/n, u/n, v/n
	var xu, yu, xv, yv, squares float64
	for _, w := range ws {
		dx, dy, du, dv := w.X-x, w.Y-y, w.U-u, w.V-v
		f.sxx += float64(dx * dx)
		f.sxy += float64(dx * dy)
		f.syy += float64(dy * dy)
		xu += float64(dx * du)
		yu += float64(dy * du)
		xv += float64(dx * dv)
		yv += float64(dy * dv)
		squares += float64(du*du) + float64(dv*dv)
	}
	f.det = float64(f.sxx*f.syy) - float64(f.sxy*f.sxy)
	trace := f.sxx + f.syy
	if trace == 0 || f.det <= 1e-12*float64(trace*trace) {
		return f, false
	}
	long := (trace + math.Hypot(f.sxx-f.syy, 2*f.sxy)) / 2
	f.Shape = math.Sqrt(f.det) / long
	f.UX = (float64(f.syy*xu) - float64(f.sxy*yu)) / f.det
	f.UY = (float64(f.sxx*yu) - float64(f.sxy*xu)) / f.det
	f.VX = (float64(f.syy*xv) - float64(f.sxy*yv)) / f.det
	f.VY = (float64(f.sxx*yv) - float64(f.sxy*xv)) / f.det
	f.U0 = u - float64(f.UX*x) - float64(f.UY*y)
	f.V0 = v - float64(f.VX*x) - float64(f.VY*y)
	if f.N > 3 {
		ssr := squares - float64(f.UX*xu) - float64(f.UY*yu) - float64(f.VX*xv) - float64(f.VY*yv)
		f.Deviation = math.Sqrt(max(ssr, 0) / float64(2*(f.N-3)))
	}
	return f, true
}

// Divergence of the field, 1/s; positive where air flows apart.
func (f *Field) Divergence() float64 { return f.UX + f.VY }

// Vorticity of the field, 1/s; positive anticlockwise.
func (f *Field) Vorticity() float64 { return f.VX - f.UY }

// Deformation is the stretching and the shearing of the field, 1/s.
func (f *Field) Deformation() (stretching, shearing float64) { return f.UX - f.VY, f.VX + f.UY }

// Error is the standard error of divergence and of vorticity, 1/s, which is
// the same, for independent errors of sd m/s in each component: sd sqrt((Sxx +
// Syy)/det) (Davies-Jones 1993). With the Deviation in place of sd it is what
// the fit itself shows.
func (f *Field) Error(sd float64) float64 { return sd * math.Sqrt((f.sxx+f.syy)/f.det) }

// Along is the change of the wind along a direction (unit vector) per metre of
// it, 1/s: t' G t. A headwind on that way changes by the opposite.
func (f *Field) Along(east, north float64) float64 {
	return float64(f.UX*float64(east*east)) + float64((f.UY+f.VX)*float64(east*north)) + float64(f.VY*float64(north*north))
}

// Polygon is divergence and vorticity (1/s) inside the masts as the corners of
// a polygon in anticlockwise order, by the integral around it with a wind that
// is linear along each side: D = (1/A) sum of (u_i + u_j)/2 (y_j - y_i) - (v_i +
// v_j)/2 (x_j - x_i), j = i + 1. It says no where they enclose nothing.
func Polygon(ws []Wind) (divergence, vorticity float64, ok bool) {
	var area float64
	for i := range ws {
		a, b := ws[i], ws[(i+1)%len(ws)]
		dx, dy := b.X-a.X, b.Y-a.Y
		u, v := (a.U+b.U)/2, (a.V+b.V)/2
		area += float64((float64(a.X*b.Y) - float64(b.X*a.Y)) / 2)
		divergence += float64(u*dy) - float64(v*dx)
		vorticity += float64(u*dx) + float64(v*dy)
	}
	if len(ws) < 3 || !(area > 0) {
		return 0, 0, false
	}
	return divergence / area, vorticity / area, true
}
