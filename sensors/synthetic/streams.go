package synthetic

import (
	"hash/fnv"
	"math/rand/v2"
)

// stream is the random generator for one purpose of a scene. Its name, not the
// order of use, decides its numbers.
func stream(seed uint64, name string) *rand.Rand {
	h := fnv.New64a()
	h.Write([]byte(name))
	return rand.New(rand.NewPCG(seed, h.Sum64()))
}
