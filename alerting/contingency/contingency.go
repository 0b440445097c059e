// Package contingency scores yes-or-no statements: what goes in is how often
// something was told and came, was told and did not come, came untold, or did
// neither; what comes out are the measures of forecast verification, shares
// with their intervals. What counts as told and as come is for the packages
// that count: alerting/review for the alerts of an airfield, alerting/survey
// for drawn weather.
package contingency

import "math"

// Interval is a share with its 95 % interval after Wilson; Of = 0 says that
// there is nothing to divide.
type Interval struct {
	Value *float64 `json:"value"`
	Low   *float64 `json:"low"`
	High  *float64 `json:"high"`
	Of    int      `json:"of"`
}

// z95 is the 97.5 % point of the normal distribution.
const z95 = 1.959963984540054

// Wilson is the 95 % interval of a share of n cases; n may be an effective
// number. From 0 to 1 for no cases. E.B. Wilson, "Probable inference, the law
// of succession, and statistical inference", Journal of the American
// Statistical Association 22, 1927, pages 209-212:
//
//	(p + z^2/2n -+ z sqrt(p(1-p)/n + z^2/4n^2)) / (1 + z^2/n)
func Wilson(share, n float64) (low, high float64) {
	if n <= 0 {
		return 0, 1
	}
	z2 := z95 * z95
	middle := share + z2/(2*n)
	half := float64(z95 * math.Sqrt(float64(share*(1-share))/n+z2/(4*n*n)))
	return max(0, (middle-half)/(1+z2/n)), min(1, (middle+half)/(1+z2/n))
}

// Share is k of n with its interval.
func Share(k, n int) Interval {
	if n <= 0 {
		return Interval{}
	}
	p := float64(k) / float64(n)
	low, high := Wilson(p, float64(n))
	return Interval{Value: &p, Low: &low, High: &high, Of: n}
}

// Table counts what was told against what came.
type Table struct {
	Hits         int `json:"hits"`          // came, and was told
	FalseAlarms  int `json:"false_alarms"`  // told, and did not come
	Misses       int `json:"misses"`        // came, and was not told
	CorrectNulls int `json:"correct_nulls"` // neither came nor was told
}

// Count adds one case.
func (t *Table) Count(came, told bool) {
	switch {
	case came && told:
		t.Hits++
	case came:
		t.Misses++
	case told:
		t.FalseAlarms++
	default:
		t.CorrectNulls++
	}
}

// Scores are the measures of a table, after D.S. Wilks, Statistical Methods in
// the Atmospheric Sciences, chapter "Forecast verification". FAR is the share
// of the alarms that were false, POFD the share of the nulls that were alarmed.
// nil where there is nothing to divide.
type Scores struct {
	POD  Interval `json:"pod"`
	FAR  Interval `json:"far"`
	POFD Interval `json:"pofd"`
	CSI  Interval `json:"csi"`
	Bias *float64 `json:"bias"`
	PC   *float64 `json:"pc"`
	HSS  *float64 `json:"hss"`
	PSS  *float64 `json:"pss"`
	ETS  *float64 `json:"ets"`
	SEDI *float64 `json:"sedi"`
}

// Scores of the table, with a = hits, b = false alarms, c = misses, d = correct
// nulls, n all of them.
func (t Table) Scores() Scores {
	a, b, c, d := float64(t.Hits), float64(t.FalseAlarms), float64(t.Misses), float64(t.CorrectNulls)
	n := a + b + c + d
	if n == 0 {
		return Scores{}
	}
	chance := (a + b) * (a + c) / n // hits by chance
	s := Scores{
		POD: Share(t.Hits, t.Hits+t.Misses), FAR: Share(t.FalseAlarms, t.Hits+t.FalseAlarms),
		POFD: Share(t.FalseAlarms, t.FalseAlarms+t.CorrectNulls), CSI: Share(t.Hits, t.Hits+t.FalseAlarms+t.Misses),
		Bias: quotient(a+b, a+c), PC: quotient(a+d, n),
		HSS: quotient(2*(float64(a*d)-float64(b*c)), float64((a+c)*(c+d))+float64((a+b)*(b+d))),
		ETS: quotient(a-chance, a+b+c-chance),
	}
	if s.POD.Of == 0 || s.POFD.Of == 0 {
		return s
	}
	H, F := *s.POD.Value, *s.POFD.Value
	difference := H - F
	s.PSS = &difference
	if H > 0 && H < 1 && F > 0 && F < 1 {
		s.SEDI = quotient(math.Log(F)-math.Log(H)-math.Log(1-F)+math.Log(1-H),
			math.Log(F)+math.Log(H)+math.Log(1-F)+math.Log(1-H))
	}
	return s
}

// quotient is nil where there is nothing to divide.
func quotient(a, b float64) *float64 {
	if b == 0 {
		return nil
	}
	v := a / b
	return &v
}
