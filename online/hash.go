package online

import (
	"encoding/binary"
	"math/bits"
)

// Shards is how many slices the units of every study are cut into.
const Shards = 64

// keyed is a hash of unit keys that depends on the study's name, so that the order
// in which equal times are added says nothing about the key in any other study.
type keyed uint64

func newKeyed(study string) keyed {
	h := uint64(0xcbf29ce484222325) // FNV-1a
	for i := range len(study) {
		h = (h ^ uint64(study[i])) * 0x100000001b3
	}
	return keyed(h)
}

// sum mixes eight bytes at a time by a folded 64x64-bit product. It is stable for
// good: shards and the order of addition hang on it.
func (k keyed) sum(b []byte) uint64 {
	const p, q = 0x9e3779b97f4a7c15, 0xd1342543de82ef95
	h := uint64(k) ^ uint64(len(b))*p
	for len(b) >= 8 {
		h = fold(h^binary.LittleEndian.Uint64(b), q)
		b = b[8:]
	}
	var tail uint64
	for i := len(b) - 1; i >= 0; i-- {
		tail = tail<<8 | uint64(b[i])
	}
	return fold(fold(h^tail, p)^uint64(k), q)
}

func (k keyed) number(n uint64) uint64 {
	var b [8]byte
	binary.LittleEndian.PutUint64(b[:], n)
	return k.sum(b[:])
}

func fold(a, b uint64) uint64 {
	hi, lo := bits.Mul64(a, b)
	return hi ^ lo ^ a
}
