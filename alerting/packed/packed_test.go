package packed

import (
	"encoding/binary"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
)

// bitsOf shows bytes as they are read.
func bitsOf(b []byte) string {
	var s strings.Builder
	for _, c := range b {
		fmt.Fprintf(&s, "%08b", c)
	}
	return s.String()
}

// A code that is written down by its definition (Golomb, Run-Length Encodings,
// IEEE Transactions on Information Theory 12 (1966) 399, table for m = 2^k;
// from memory): the quotient in unary, then the remainder in k bits.
func plainCode(us []uint64, c Rice) string {
	var s strings.Builder
	for _, u := range us {
		if q := u >> c.Low; q < 24 {
			s.WriteString(strings.Repeat("1", int(q)) + "0")
			if c.Low > 0 {
				fmt.Fprintf(&s, "%0*b", c.Low, u&(1<<c.Low-1))
			}
			continue
		}
		s.WriteString(strings.Repeat("1", 24))
		fmt.Fprintf(&s, "%0*b", c.Far, u)
	}
	return s.String()
}

// The words of the code for m = 4 as Golomb's paper lists them.
func TestWordsOfTheCode(t *testing.T) {
	for u, word := range []string{"000", "001", "010", "011", "1000", "1001", "1010", "1011", "11000"} {
		got := bitsOf(Rice{Low: 2, Far: 32}.Append(nil, []uint64{uint64(u)}))
		if !strings.HasPrefix(got, word) || strings.Contains(got[len(word):], "1") {
			t.Errorf("%d is %s, not %s", u, got, word)
		}
	}
}

func TestZigzag(t *testing.T) {
	for v, u := range map[int64]uint64{0: 0, -1: 1, 1: 2, -2: 3, 2: 4, math.MaxInt64: math.MaxUint64 - 1, math.MinInt64: math.MaxUint64} {
		if Zigzag(v) != u || Unzigzag(u) != v {
			t.Errorf("%d becomes %d and %d becomes %d", v, Zigzag(v), u, Unzigzag(u))
		}
	}
}

// drawn gives numbers of all sizes that fit into far bits.
func drawn(rng *rand.Rand, far int) []uint64 {
	us := make([]uint64, rng.IntN(200))
	width := rng.IntN(far)
	for i := range us {
		us[i] = rng.Uint64() >> (63 - width)
		if rng.IntN(20) == 0 {
			us[i] = rng.Uint64() >> (64 - far) >> rng.IntN(far)
		}
	}
	return us
}

func TestRoundTrip(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 1))
	for round := range 300 {
		code := Rice{Low: rng.IntN(32), Far: []int{32, 64}[round%2]}
		us := drawn(rng, code.Far)
		b := code.Append([]byte{0x5A}, us)
		want := plainCode(us, code)
		if got := bitsOf(b[1:]); !strings.HasPrefix(got, want) || len(got)-len(want) > 7 || uint64(len(want)) != code.size(us) {
			t.Fatalf("round %d: %v by %+v\n%s, not\n%s, of size %d", round, us, code, got, want, code.size(us))
		}
		r := Reader{Left: append(b[1:len(b):len(b)], 0xA5, 0xFF)}
		if got := r.Rice(nil, len(us), code); r.Bad || !slices.Equal(got, us) || len(r.Left) != 2 {
			t.Fatalf("round %d: %v became %v, bad %v, %d bytes left", round, us, got, r.Bad, len(r.Left))
		}
		for cut := 1; cut < len(b); cut++ {
			r := Reader{Left: b[1:cut]}
			if r.Rice(nil, len(us), code); !r.Bad || r.Left != nil {
				t.Fatalf("round %d: cut to %d bytes of %d and not refused", round, cut, len(b))
			}
		}
	}
}

// The best code is found against all there are.
func TestShortest(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 2))
	for round := range 150 {
		far, low := []int{32, 64}[round%2], []int{15, 31}[rng.IntN(2)]
		us := drawn(rng, far)
		got, size := Shortest(us, low, far)
		best := Rice{Far: far}
		for k := range low + 1 {
			if c := (Rice{Low: k, Far: far}); len(plainCode(us, c)) < len(plainCode(us, best)) {
				best = c
			}
		}
		if got != best || size != uint64(len(plainCode(us, best))) {
			t.Fatalf("round %d: %v by %+v in %d, not %+v in %d", round, us, got, size, best, len(plainCode(us, best)))
		}
	}
}

// A geometric distribution costs at most a few percent more than its entropy,
// which is what the code is for.
func TestNearEntropy(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 3))
	for _, mean := range []float64{2, 10, 300} {
		us := make([]uint64, 20000)
		p := 1 / (1 + mean)
		for i := range us {
			us[i] = uint64(math.Log(1-rng.Float64()) / math.Log(1-p))
		}
		_, size := Shortest(us, 31, 64)
		entropy := (-p*math.Log2(p) - (1-p)*math.Log2(1-p)) / p
		if ratio := float64(size) / float64(len(us)) / entropy; ratio < 0.98 || ratio > 1.05 {
			t.Errorf("mean %g: %.3f of the entropy", mean, ratio)
		}
	}
}

// After the first thing that does not fit all is zero.
func TestBadReader(t *testing.T) {
	for name, spoil := range map[string]func(r *Reader){
		"uvarint": func(r *Reader) { r.Uvarint() },
		"varint":  func(r *Reader) { r.Varint() },
		"count":   func(r *Reader) { r.Count(100) },
		"bytes":   func(r *Reader) { r.Bytes(4) },
		"rice":    func(r *Reader) { r.Rice(nil, 2, Rice{Low: 3, Far: 64}) },
	} {
		r := Reader{Left: []byte{0xFF, 0xFF, 0xFF}}
		spoil(&r)
		if !r.Bad || r.Byte() != 0 || r.Bytes(1) != nil || r.Uvarint() != 0 || r.Varint() != 0 || r.Count(5) != 0 {
			t.Errorf("%s: bad %v, %d bytes left", name, r.Bad, len(r.Left))
		}
	}
	r := Reader{Left: binary.AppendUvarint(nil, 101)}
	if r.Count(100) != 0 || !r.Bad {
		t.Error("a count above what may be is believed")
	}
	r = Reader{Left: binary.AppendVarint(append(binary.AppendUvarint(nil, 100), 7, 8, 9), -3)}
	if n, c, b, v := r.Count(100), r.Byte(), r.Bytes(2), r.Varint(); n != 100 || c != 7 || b[1] != 9 || v != -3 || r.Bad || len(r.Left) != 0 {
		t.Error(n, c, b, v, r)
	}
}
