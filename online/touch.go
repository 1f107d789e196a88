package online

import (
	"encoding/binary"
	"math"
)

// A Touch is what one event means to one study, decided from the event alone: its
// unit, whether it can be an entry (with arm, segment and covariates), and what it
// would tally. Shards apply touches; others only carry them.
//
//	length  uint32   of the whole touch
//	study   uint8    index
//	flags   uint8    1: may be an entry
//	hash    uint64   of the unit; a time bucket's has no key
//	key     uvarint length, bytes
//	entry   (flag 1) arm and each segment field: uvarint length+1, bytes, 0 if lacking; each entry covariate: float64
//	tallies uint8 count, then each: uint8 index, float64 value
type Touch []byte

const (
	touchHead  = 4 + 1 + 1 + 8
	touchEntry = 1
)

// NextTouch splits the first touch off a payload.
func NextTouch(payload []byte) (Touch, []byte) {
	n := binary.LittleEndian.Uint32(payload)
	return Touch(payload[:n:n]), payload[n:]
}

// Study is the index of the study that the touch is for.
func (t Touch) Study() int { return int(t[4]) }

func (t Touch) hash() uint64 { return binary.LittleEndian.Uint64(t[6:]) }

// Shard is the slice of units that the touch belongs to.
func (t Touch) Shard() int { return int(t.hash() % Shards) }

// Entry tells whether the event can admit its unit; among events of equal time a
// unit's entry comes first.
func (t Touch) Entry() bool { return t[5]&touchEntry != 0 }

// cursor reads a touch's body. Touches are made by Plan.Project alone, so it trusts them.
type cursor struct{ b []byte }

func (t Touch) body() cursor { return cursor{t[touchHead:]} }

func (c *cursor) uvarint() int {
	n, w := binary.Uvarint(c.b)
	c.b = c.b[w:]
	return int(n)
}

func (c *cursor) bytes() []byte {
	n := c.uvarint()
	v := c.b[:n]
	c.b = c.b[n:]
	return v
}

// field is a text that may be lacking.
func (c *cursor) field() ([]byte, bool) {
	n := c.uvarint() - 1
	if n < 0 {
		return nil, false
	}
	v := c.b[:n]
	c.b = c.b[n:]
	return v, true
}

func (c *cursor) byte() int {
	v := c.b[0]
	c.b = c.b[1:]
	return int(v)
}

func (c *cursor) float() float64 {
	v := math.Float64frombits(binary.LittleEndian.Uint64(c.b))
	c.b = c.b[8:]
	return v
}
