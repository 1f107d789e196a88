package kafka

import "encoding/binary"

// A cursor reads the protocol's primitive types: big endian, strings with an int16 before them, or, in
// "flexible" messages, with an unsigned varint. A read past the end sets short, and yields zeros from then
// on, so that one check at the end suffices.
type cursor struct {
	b     []byte
	i     int
	short bool
}

// take steps over n bytes and returns them, part of b.
func (c *cursor) take(n int) []byte {
	if c.short || n < 0 || n > len(c.b)-c.i {
		c.short = true
		return nil
	}
	c.i += n
	return c.b[c.i-n : c.i]
}

func (c *cursor) int8() int8 {
	if p := c.take(1); p != nil {
		return int8(p[0])
	}
	return 0
}

func (c *cursor) int16() int16 {
	if p := c.take(2); p != nil {
		return int16(binary.BigEndian.Uint16(p))
	}
	return 0
}

func (c *cursor) int32() int32 {
	if p := c.take(4); p != nil {
		return int32(binary.BigEndian.Uint32(p))
	}
	return 0
}

func (c *cursor) int64() int64 {
	if p := c.take(8); p != nil {
		return int64(binary.BigEndian.Uint64(p))
	}
	return 0
}

// length is the count of an array of elements that take at least size bytes each.
func (c *cursor) length(size int) int {
	return c.bounded(int(c.int32()), size)
}

func (c *cursor) bounded(n, size int) int {
	if n > (len(c.b)-c.i)/size {
		c.short = true
		return 0
	}
	return max(n, 0) // -1 is an absent array
}

func (c *cursor) string() string { return string(c.take(int(c.int16()))) }

func (c *cursor) uvarint() int {
	n, w := binary.Uvarint(c.b[c.i:])
	if c.short || w <= 0 || n > 1<<31 {
		c.short = true
		return 0
	}
	c.i += w
	return int(n)
}

// compactLength is length in a flexible message: one more than the count, 0 for absent.
func (c *cursor) compactLength(size int) int { return c.bounded(c.uvarint()-1, size) }

func (c *cursor) compactString() string { return string(c.take(max(c.uvarint()-1, 0))) }

// tags steps over the tagged fields that end each structure of a flexible message.
func (c *cursor) tags() {
	for n := c.uvarint(); n > 0 && !c.short; n-- {
		c.uvarint()
		c.take(c.uvarint())
	}
}

// varint decodes a zigzag varint at b[i:] and returns the place after it, or -1 if there is none. One and two
// bytes are what nearly all numbers in a record batch take.
func varint(b []byte, i int) (v int64, next int) {
	if i+1 < len(b) {
		one := b[i]
		if one < 0x80 {
			return int64(one>>1) ^ -int64(one&1), i + 1
		}
		if two := b[i+1]; two < 0x80 {
			return int64(two)<<6 | int64(one>>1&0x3f) ^ -int64(one&1), i + 2
		}
	}
	return longVarint(b, i)
}

func longVarint(b []byte, i int) (int64, int) {
	if i > len(b) {
		return 0, -1
	}
	v, w := binary.Varint(b[i:])
	if w <= 0 {
		return 0, -1
	}
	return v, i + w
}

func appendString(b []byte, s string) []byte {
	return append(binary.BigEndian.AppendUint16(b, uint16(len(s))), s...)
}

func appendCompactString(b []byte, s string) []byte {
	return append(binary.AppendUvarint(b, uint64(len(s)+1)), s...)
}

func appendInt32(b []byte, v int32) []byte { return binary.BigEndian.AppendUint32(b, uint32(v)) }

func appendInt64(b []byte, v int64) []byte { return binary.BigEndian.AppendUint64(b, uint64(v)) }
