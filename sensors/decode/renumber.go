package decode

// Renumber makes the readings of the decoder carry another index. What waits
// in it for the rest of its measurement goes on waiting.
func (d *Decoder) Renumber(index int) { d.index = index }
