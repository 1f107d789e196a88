package wire

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"math/bits"
)

// ErrMalformed is wrapped by every error of a Reader.
var ErrMalformed = errors.New("malformed state")

// A Reader takes values off the front of a byte slice. The first fault sticks:
// from then on every method returns zero values, Remaining is 0, and Err tells
// what was wrong and where. So a decoder may read all it wants and ask once, as
// long as it sizes nothing by a number that did not come from Count.
type Reader struct {
	b   []byte // not yet read
	n   int    // length of the whole
	err error
}

// NewReader returns a Reader of b, which must not change while it is in use.
func NewReader(b []byte) *Reader { return &Reader{b: b, n: len(b)} }

// Err returns the first fault, or nil.
func (r *Reader) Err() error { return r.err }

// Remaining returns the number of bytes not yet read; 0 after a fault.
func (r *Reader) Remaining() int { return len(r.b) }

// Done returns the first fault; bytes left over are one.
func (r *Reader) Done() error {
	if len(r.b) > 0 {
		r.Fail("%d bytes left over", len(r.b))
	}
	return r.err
}

// Fail records a fault at the present position, unless there is one already. A
// decoder calls it for values that have the right form and no meaning.
func (r *Reader) Fail(format string, args ...any) {
	if r.err == nil {
		r.err = fmt.Errorf("%w at byte %d of %d: %s", ErrMalformed, r.n-len(r.b), r.n, fmt.Sprintf(format, args...))
	}
	r.b = nil
}

// U8 reads one byte.
func (r *Reader) U8() uint8 {
	if len(r.b) == 0 {
		r.Fail("ends before a byte")
		return 0
	}
	v := r.b[0]
	r.b = r.b[1:]
	return v
}

// Bool reads a byte that is 0 or 1.
func (r *Reader) Bool() bool {
	if len(r.b) > 0 && r.b[0] > 1 {
		r.Fail("%d is neither false (0) nor true (1)", r.b[0])
	}
	return r.U8() == 1
}

// U64 reads an unsigned integer.
func (r *Reader) U64() uint64 {
	v, n := binary.Uvarint(r.b)
	switch {
	case n == 0:
		r.Fail("ends within an integer")
		return 0
	case n < 0:
		r.Fail("an integer exceeds 64 bits")
		return 0
	case n > 1 && r.b[n-1] == 0:
		r.Fail("an integer is written with %d bytes, more than it needs", n)
		return 0
	}
	r.b = r.b[n:]
	return v
}

// I64 reads a signed integer.
func (r *Reader) I64() int64 {
	u := r.U64()
	return int64(u>>1) ^ -int64(u&1)
}

// F64 reads a float64.
func (r *Reader) F64() float64 {
	if len(r.b) < 8 {
		r.Fail("ends within a float: 8 bytes needed, %d remain", len(r.b))
		return 0
	}
	v := math.Float64frombits(binary.LittleEndian.Uint64(r.b))
	r.b = r.b[8:]
	return v
}

// Count reads the number of elements that follow, each of at least minBytes (1 or
// more) bytes. It refuses a number for which the remaining bytes cannot suffice,
// so that what it returns may size an allocation: at most the length of the input
// over minBytes elements.
func (r *Reader) Count(minBytes int) int {
	if minBytes < 1 {
		panic(fmt.Sprintf("wire: Count(%d): elements without bytes cannot be bounded", minBytes))
	}
	n := r.U64()
	if hi, lo := bits.Mul64(n, uint64(minBytes)); hi != 0 || lo > uint64(len(r.b)) {
		r.Fail("%d elements of %d or more bytes, where %d bytes remain", n, minBytes, len(r.b))
		return 0
	}
	return int(n)
}

// Bytes reads a byte string. The result is a part of the Reader's input, nil only
// after a fault; a caller who keeps it longer than the input makes a copy.
func (r *Reader) Bytes() []byte {
	n := r.Count(1)
	if r.err != nil {
		return nil
	}
	v := r.b[:n:n]
	r.b = r.b[n:]
	return v
}

// String reads a string, a copy of its own.
func (r *Reader) String() string { return string(r.Bytes()) }

// F64s reads a slice of float64 of its own, nil if empty.
func (r *Reader) F64s() []float64 {
	n := r.Count(8)
	if n == 0 {
		return nil
	}
	v := make([]float64, n)
	for i := range v {
		v[i] = r.F64()
	}
	return v
}
