package units

import "encoding/binary"

// keyRef is a key's place among the keys: block and offset, plus one; 0 is none.
type keyRef uint32

const (
	blockBits = 16
	blockSize = 1 << blockBits
)

// keys holds the units' names, one after another in blocks, each behind its length.
// A name longer than a block has a block of its own.
type keys struct {
	blocks [][]byte
	used   int
	waste  int
}

func (k *keys) put(key []byte) keyRef {
	need := len(key) + binary.MaxVarintLen32
	last := len(k.blocks) - 1
	if last < 0 || len(k.blocks[last])+need > cap(k.blocks[last]) || len(k.blocks[last]) >= blockSize-1 {
		k.blocks = append(k.blocks, make([]byte, 0, max(blockFor(last), need)))
		last++
	}
	b := k.blocks[last]
	at := len(b)
	b = binary.AppendUvarint(b, uint64(len(key)))
	k.blocks[last] = append(b, key...)
	k.used += len(k.blocks[last]) - at
	return keyRef(last<<blockBits+at) + 1
}

// blockFor makes the first blocks of a small table small.
func blockFor(blocks int) int { return min(blockSize, 1024<<min(blocks+1, 6)) }

func (k *keys) get(r keyRef) []byte {
	at := uint32(r - 1)
	b := k.blocks[at>>blockBits][at&(blockSize-1):]
	n, w := binary.Uvarint(b)
	return b[w : w+int(n)]
}

func (k *keys) drop(r keyRef) {
	n := len(k.get(r))
	k.waste += n + 1
}

func (k *keys) wasteful() bool { return k.waste > blockSize && 2*k.waste > k.used }
