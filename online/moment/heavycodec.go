package moment

import (
	"fmt"

	"stillwell/online/wire"
)

// heavyVersion is the first byte of a stored heavy set. The rest, in the forms of
// package wire, for width k:
//
//	width, room     U64
//	seen            U64, below 2^53
//	weight, centre  k F64 each
//	kept            min(seen, room) of: name Bytes, k F64
//	extremes        if seen > 0, 2 k of the same
const heavyVersion = 1

// AppendBinary appends the set's stored form to b. Equal sets give equal bytes. The
// error is always nil.
func (h *Heavy) AppendBinary(b []byte) ([]byte, error) {
	w := wire.Writer{B: b}
	w.U8(heavyVersion)
	w.U64(uint64(h.width))
	w.U64(uint64(h.room))
	w.U64(uint64(h.seen))
	write := func(xs []float64) {
		for _, x := range xs {
			w.F64(x)
		}
	}
	write(h.weight)
	write(h.centre)
	for i, u := range h.units {
		w.Bytes(u[:])
		write(h.kept(i))
	}
	if h.seen > 0 {
		for i, u := range h.extremeUnits {
			w.Bytes(u[:])
			write(h.extreme(i))
		}
	}
	return w.B, nil
}

// DecodeHeavy reads a set of the given width and room from the front of b and
// returns what follows it.
//
//	error  wraps wire.ErrMalformed for what no heavy set can be, ErrShape when width
//	       or room are others
func DecodeHeavy(width, room int, b []byte) (*Heavy, []byte, error) {
	h, err := NewHeavy(width, room)
	if err != nil {
		return nil, nil, err
	}
	r := wire.NewReader(b)
	if v := r.U8(); v != heavyVersion {
		r.Fail("version %d, want %d", v, heavyVersion)
	}
	if k, m := r.U64(), r.U64(); r.Err() == nil && (k != uint64(width) || m != uint64(room)) {
		return nil, nil, fmt.Errorf("stored heavy set: width %d and room %d, want %d and %d: %w", k, m, width, room, ErrShape)
	}
	h.seen = int64(count(r))
	readUsable(r, h.weight)
	readUsable(r, h.centre)
	row := func(u *Unit, z []float64) {
		name := r.Bytes()
		if len(name) != len(u) {
			r.Fail("a name of %d bytes, want %d", len(name), len(u))
		}
		copy(u[:], name)
		readUsable(r, z)
	}
	kept := int(min(h.seen, int64(room)))
	h.units, h.scores, h.reach = h.units[:kept], h.scores[:kept*width], h.reach[:kept]
	for i := range h.units {
		row(&h.units[i], h.kept(i))
		h.reach[i] = reach(h.weight, h.centre, h.kept(i))
	}
	if h.seen > 0 {
		for i := range h.extremeUnits {
			row(&h.extremeUnits[i], h.extreme(i))
		}
	}
	if err := r.Err(); err != nil {
		return nil, nil, fmt.Errorf("stored heavy set: %w", err)
	}
	h.findLeast()
	return h, b[len(b)-r.Remaining():], nil
}
