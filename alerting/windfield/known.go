package windfield

// known is the prior covariance of one field between places that never change:
// every entry is made of these numbers, so they are worked out once.
type known struct {
	masts   []components // [mast][mast]
	cross   []components // [target][mast]
	targets []float64    // [target][target] of the headwinds, with that of the common mean, m2/s2
}

// components of a covariance of two winds, m2/s2.
type components struct{ ee, en, nn float64 }

func (c components) components() (ee, en, nn float64) { return c.ee, c.en, c.nn }

// covariances of a field, made when first asked for.
func (e *Estimator) covariances(field int) *known {
	if e.known[field] != nil {
		return e.known[field]
	}
	f, masts, targets := e.fields[field], e.masts, e.targets
	k := &known{
		masts:   make([]components, 0, len(masts)*len(masts)),
		cross:   make([]components, 0, len(targets)*len(masts)),
		targets: make([]float64, 0, len(targets)*len(targets)),
	}
	for _, a := range masts {
		for _, b := range masts {
			ee, en, nn := covariance(f, a.X-b.X, a.Y-b.Y)
			k.masts = append(k.masts, components{ee, en, nn})
		}
	}
	mean := e.prior.meanCovariance(0)
	for _, a := range targets {
		for _, b := range masts {
			ee, en, nn := covariance(f, a.X-b.X, a.Y-b.Y)
			k.cross = append(k.cross, components{ee, en, nn})
		}
		for _, b := range targets {
			ee, en, nn := covariance(f, a.X-b.X, a.Y-b.Y)
			// Var(-t.(u,v)) with both unit vectors.
			k.targets = append(k.targets, float64(float64(a.East*b.East)*(mean+ee))+float64(float64(a.North*b.North)*(mean+nn))+
				float64((float64(a.East*b.North)+float64(a.North*b.East))*en))
		}
	}
	e.known[field] = k
	return k
}
