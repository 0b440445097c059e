//go:build !amd64

package front

// timesFast is for processors whose vectors are not used.
func (p *posterior) timesFast(int, *bank, []hit, []float64) bool { return false }
