package judged

import (
	"encoding/binary"

	"sockline/sensors"
)

// Again is the content of a file of the day that begins at start, filled with
// the whole blocks of another day over and over.
func Again(content []byte, start sensors.Instant) []byte {
	all, _ := frames(content)
	var about []byte
	var bodies [][]byte // without their start
	for _, f := range all {
		if f.kind == kindContext {
			about = f.body
			continue
		}
		_, n := binary.Varint(f.body[4:])
		bodies = append(bodies, f.body[4+n:])
	}
	out := appendFrame([]byte(head), kindContext, about)
	id := binary.BigEndian.AppendUint32(nil, checksum(about))
	for k := range 86400 / BlockSteps {
		body := binary.AppendVarint(append([]byte{}, id...), int64(start)+int64(k)*BlockSteps*1000)
		out = appendFrame(out, kindSteps, append(body, bodies[k%len(bodies)]...))
	}
	return out
}
