// Package wire holds the bytes that every stored state is made of: a Writer that
// appends and a Reader that trusts nothing.
//
//	U8      1 byte
//	Bool    1 byte, 0 or 1
//	U64     uvarint: 7 bits a byte, low ones first, high bit set on all but the last; at most 10 bytes
//	I64     zigzag, then as U64: 0, -1, 1, -2 are 0, 1, 2, 3
//	F64     8 bytes, IEEE 754, little endian; every bit is kept, those of a NaN and of -0 too
//	Bytes   length as U64, then the bytes
//	String  as Bytes
//	F64s    count as U64, then each as F64
//
// Every value has exactly one encoding: a Reader refuses a varint that is longer
// than need be and a Bool that is neither 0 nor 1, so what decodes encodes to the
// same bytes. Versions, checksums and the order of things are the caller's.
package wire

import (
	"encoding/binary"
	"math"
)

// A Writer appends to B. The zero value is ready; B may be given capacity
// beforehand, and cut back to B[:0] for the next use.
type Writer struct{ B []byte }

// U8 appends one byte.
func (w *Writer) U8(v uint8) { w.B = append(w.B, v) }

// Bool appends 0 or 1.
func (w *Writer) Bool(v bool) {
	if v {
		w.U8(1)
	} else {
		w.U8(0)
	}
}

// U64 appends v in 1 to 10 bytes, fewer for smaller values.
func (w *Writer) U64(v uint64) { w.B = binary.AppendUvarint(w.B, v) }

// I64 appends v in 1 to 10 bytes, fewer for values nearer zero.
func (w *Writer) I64(v int64) { w.B = binary.AppendVarint(w.B, v) }

// F64 appends v in 8 bytes.
func (w *Writer) F64(v float64) {
	w.B = binary.LittleEndian.AppendUint64(w.B, math.Float64bits(v))
}

// Bytes appends the length of v, and v.
func (w *Writer) Bytes(v []byte) {
	w.U64(uint64(len(v)))
	w.B = append(w.B, v...)
}

// String appends the length of v in bytes, and v.
func (w *Writer) String(v string) {
	w.U64(uint64(len(v)))
	w.B = append(w.B, v...)
}

// F64s appends the number of values, and the values.
func (w *Writer) F64s(v []float64) {
	w.U64(uint64(len(v)))
	for _, x := range v {
		w.F64(x)
	}
}
