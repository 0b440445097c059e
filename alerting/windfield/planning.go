package windfield

// Covariance is the prior covariance of two wind vectors of this field dx, dy
// metres apart, m2/s2: east-east, east-north, north-north.
func (f Field) Covariance(dx, dy float64) (ee, en, nn float64) { return covariance(f, dx, dy) }

// outflowComponent is the root mean square of one component of an outflow's
// wind over the circle of twice its radius, for a greatest wind of 1: between
// that of the broad and that of the compact shape.
const outflowComponent = 0.5

// Planning is what a network of masts is judged by before it stands: the most
// restless air around a pattern that the prior knows, and an outflow of usual
// size anywhere. As a Gaussian field the latter has a potential alone, whose
// bumps blow hardest at their length.
func (p Prior) Planning() []Field {
	var fields []Field
	if n := len(p.Disturbed); n > 0 {
		fields = append(fields, p.Disturbed[n-1])
	}
	if n := len(p.OutflowRadii); n > 0 {
		fields = append(fields, Field{
			Deviation: outflowComponent * p.OutflowStrength, Length: p.OutflowRadii[n/2],
			Irrotational: 1, Time: p.OutflowTime,
		})
	}
	return fields
}
