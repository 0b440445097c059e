package front

import "golang.org/x/sys/cpu"

// timesAVX2 is timesOf for all speeds of a row. hits holds, for each of n, how far
// it lies along the motion, the variance of its time and the time.
//
// Its instructions count on 17 speeds.
//
//go:noescape
func timesAVX2(slow, mean, spread, ssr, product, hits *float64, n int) (most float64)

var _ = [1]struct{}{}[speeds-17]

// timesFast is timesOf for all speeds at once where the processor can; false where
// it has done nothing that counts. line is the first of the row.
func (p *posterior) timesFast(line int, b *bank, hits []hit, row []float64) bool {
	if !cpu.X86.HasAVX2 || len(hits) == 0 {
		return false
	}
	p.flat = p.flat[:0]
	for k := range hits {
		q := &hits[k]
		p.flat = append(p.flat, row[q.place], float64(q.sd*q.sd)+lineRough*lineRough, q.t)
	}
	most := timesAVX2(&b.slow[0], &p.t0[line], &p.spread[line], &p.ssr[0], &p.product[0], &p.flat[0], len(hits))
	clear(p.logs[:])
	return most <= tooGreat
}
