package windfield

import "math"

// pairing is the scratch of the search for a second outflow on one state of the
// air.
type pairing struct {
	solved  []float64       // K^-1 Phi of the first, one strength
	cross   [dims][]float64 // [strength of the first][strength of the second][template]
	seconds []second        // [template]
	owner   *state          // whose cross and seconds are held ...
	first   int             // ... and of which template
}

// second is what a template is worth as the second outflow beside the first and
// does not depend on what the masts say: with X = Phi2' K^-1 Phi1 and P that of the
// first, the exact joint posterior of both sees C^-1 + M2 - X P X' instead of
// C^-1 + M2.
type second struct {
	possible bool // far enough from the first, and not as good as the same
	x, xp    [dims][dims]float64
	p        [6]float64 // the inverse of C^-1 + M2 - X P X' ...
	half     float64    // ... and half the logarithm of its determinant
}

func newPairing(templates, observations int) pairing {
	p := pairing{solved: make([]float64, observations), seconds: make([]second, templates)}
	for d := range dims {
		p.cross[d] = make([]float64, dims*templates)
	}
	return p
}

// partner is a second outflow beside a first.
type partner struct {
	j        int     // -1: none
	ratio    float64 // its strength over that of the first
	evidence float64
}

// pairingOf holds what belongs to the first outflow on state k: many steps have
// the same.
func (e *Estimator) pairingOf(en *entry, k, first int) *pairing {
	pr, s := &e.pairings[k-len(e.prior.Fields)], en.states[k]
	if pr.owner == s && pr.first == first {
		return pr
	}
	pr.owner, pr.first = s, first
	for d := range dims {
		e.outflows.column(en, first, d, e.column[:en.n])
		multiply(s, e.column[:en.n], pr.solved[:en.n])
		e.outflows.project(en, pr.solved[:en.n], pr.cross[d])
	}
	n, p := e.outflows.count(), s.patterns[outflowClass]
	p1 := packed(p.precision, n, first)
	at := e.outflows.templates[first]
	least := max(nearestPartner, at.radius)
	least2 := float64(least * least)
	for j := range n {
		t, m := &e.outflows.templates[j], &pr.seconds[j]
		gap2 := float64((t.x-at.x)*(t.x-at.x)) + float64((t.y-at.y)*(t.y-at.y))
		m.possible = gap2 >= least2 && gap2 <= farthestPartner*farthestPartner
		if !m.possible {
			continue
		}
		inv := [6]float64(p.inverse[j*6 : j*6+6]) // C^-1 + M2
		for r := range dims {
			for d := range dims {
				m.x[r][d] = pr.cross[d][r*n+j]
			}
			m.xp[r] = mul3(p1, m.x[r])
		}
		k := 0
		for r := range dims {
			for c := r; c < dims; c++ {
				inv[k] -= float64(m.xp[r][0]*m.x[c][0]) + float64(m.xp[r][1]*m.x[c][1]) + float64(m.xp[r][2]*m.x[c][2])
				k++
			}
		}
		var det float64
		m.p, det = inverse3(inv)
		if m.possible = det > 0; m.possible { // otherwise the one as good as repeats the other
			m.half = math.Log(det) / 2
		}
	}
	return pr
}

// partnersOf searches the bank for the second outflow that best explains what
// the first leaves: given the first (covariance P, b), the second sees b2 - X P b.
func (e *Estimator) partnersOf(en *entry, k, first int) (found [partners]partner) {
	for i := range found {
		found[i].j = -1
	}
	n, b := e.outflows.count(), e.b[outflowClass]
	pr := e.pairingOf(en, k, first)
	p1 := packed(en.states[k].patterns[outflowClass].precision, n, first)
	mean1 := mul3(p1, [3]float64{b[first], b[n+first], b[2*n+first]})
	for j := range pr.seconds {
		if !pr.seconds[j].possible {
			continue
		}
		m, ok := e.partnerOf(&pr.seconds[j], mean1, j)
		if !ok {
			continue
		}
		for i := range found {
			if found[i].j < 0 || m.evidence > found[i].evidence {
				copy(found[i+1:], found[i:partners-1])
				found[i] = m
				break
			}
		}
	}
	return found
}

// partnerOf is template j as the second outflow; false where both are not
// outflows that count.
func (e *Estimator) partnerOf(m *second, mean1 [dims]float64, j int) (partner, bool) {
	n, b := e.outflows.count(), e.b[outflowClass]
	var rest [dims]float64
	for r := range dims {
		x := &m.x[r]
		rest[r] = b[r*n+j] - float64(x[0]*mean1[0]) - float64(x[1]*mean1[1]) - float64(x[2]*mean1[2])
	}
	mean2 := mul3(m.p, rest)
	evidence, now1, now2 := 0.0, 0.0, 0.0
	for r := range dims {
		evidence += float64(float64(rest[r]*mean2[r]) / 2)
		now2 += float64(e.outflows.q[r] * mean2[r])
	}
	if now2 < leastTwin {
		return partner{}, false
	}
	for r := range dims {
		back := mean1[r]
		for d := range dims {
			back -= float64(m.xp[d][r] * mean2[d])
		}
		now1 += float64(e.outflows.q[r] * back)
	}
	ratio := now2 / now1
	if now1 < leastTwin || ratio < leastRatio || ratio > 1/leastRatio {
		return partner{}, false
	}
	return partner{j: j, ratio: ratio, evidence: evidence - m.half}, true
}
