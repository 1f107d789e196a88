package units

// index finds rows by hash: open addressing, linear probing, one word a place with
// the hash's upper half beside the row, so that most misses touch no row. The low bits of
// the hash, which all units of a shard have in common, do not choose the place.
type index struct {
	words []uint64 // hash's upper 32 bits << 32 | row+1; 0: empty
	n     int
}

const commonBits = 8

func home(hash, mask uint64) uint64 { return hash >> commonBits & mask }

func word(hash uint64, r Row) uint64 { return hash&^0xffffffff | uint64(r+1) }

func (x *index) find(hash uint64, is func(Row) bool) Row {
	if x.n == 0 {
		return None
	}
	mask := uint64(len(x.words) - 1)
	tag := hash >> 32
	for i := home(hash, mask); ; i = (i + 1) & mask {
		w := x.words[i]
		if w == 0 {
			return None
		}
		if w>>32 == tag {
			if r := Row(w&0xffffffff) - 1; is(r) {
				return r
			}
		}
	}
}

func (x *index) put(hash uint64, r Row, hashOf func(Row) uint64) {
	if 2*(x.n+1) > len(x.words) {
		old := x.words
		x.words = make([]uint64, max(64, 2*len(old)))
		for _, w := range old {
			if w != 0 {
				h := hashOf(Row(w&0xffffffff) - 1)
				x.place(h, w)
			}
		}
	}
	x.place(hash, word(hash, r))
	x.n++
}

func (x *index) place(hash, w uint64) {
	mask := uint64(len(x.words) - 1)
	i := home(hash, mask)
	for x.words[i] != 0 {
		i = (i + 1) & mask
	}
	x.words[i] = w
}

// remove takes a row out and closes the hole, so that probes need no tombstones.
func (x *index) remove(hash uint64, r Row, hashOf func(Row) uint64) {
	mask := uint64(len(x.words) - 1)
	want := word(hash, r)
	i := home(hash, mask)
	for x.words[i] != want {
		i = (i + 1) & mask
	}
	for j := i; ; {
		j = (j + 1) & mask
		w := x.words[j]
		if w == 0 {
			break
		}
		from := home(hashOf(Row(w&0xffffffff)-1), mask)
		if (j-from)&mask >= (j-i)&mask {
			x.words[i] = w
			i = j
		}
	}
	x.words[i] = 0
	x.n--
}
