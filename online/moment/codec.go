package moment

import (
	"fmt"
	"math"

	"stillwell/online/wire"
)

// cellVersion is the first byte of a stored cell. The rest, in the forms of package
// wire, for k components and s sums by the shape:
//
//	shape    U64     its fingerprint
//	units    U64     below 2^53
//	origin   Bool    if one is set, and then k F64
//	sums     2 s F64, Hi and Lo in turn: first, second, third order
const cellVersion = 1

// maxUnits bounds stored counts: below it a float64 holds them exactly.
const maxUnits = 1 << 53

// AppendBinary appends the cell's stored form to b. Equal cells give equal bytes.
// The error is always nil.
func (c *Cell) AppendBinary(b []byte) ([]byte, error) {
	w := wire.Writer{B: b}
	w.U8(cellVersion)
	w.U64(c.shape.print)
	w.U64(uint64(c.n))
	w.Bool(c.origin != nil)
	for _, x := range c.origin {
		w.F64(x)
	}
	for _, s := range c.sums {
		w.F64(s.Hi)
		w.F64(s.Lo)
	}
	return w.B, nil
}

// DecodeCell reads a cell of the given shape from the front of b and returns what
// follows it.
//
//	error  wraps wire.ErrMalformed for what no cell can be, ErrShape when the cell
//	       keeps other co-moments
func DecodeCell(shape *Shape, b []byte) (*Cell, []byte, error) {
	r := wire.NewReader(b)
	if v := r.U8(); v != cellVersion {
		r.Fail("version %d, want %d", v, cellVersion)
	}
	if p := r.U64(); r.Err() == nil && p != shape.print {
		return nil, nil, fmt.Errorf("stored cell: written for other estimates: %w", ErrShape)
	}
	c := NewCell(shape)
	c.n = int64(count(r))
	if r.Bool() {
		c.origin = make([]float64, shape.components)
		readUsable(r, c.origin)
		if allZero(c.origin) {
			r.Fail("an origin of zero, which is written as none")
		}
	}
	for i := range c.sums {
		s := Sum{Hi: r.F64(), Lo: r.F64()}
		if !s.normal() || c.n == 0 && (math.Float64bits(s.Hi)|math.Float64bits(s.Lo)) != 0 {
			r.Fail("sum %d is %g + %g with %d units", i, s.Hi, s.Lo, c.n)
		}
		c.sums[i] = s
	}
	if err := r.Err(); err != nil {
		return nil, nil, fmt.Errorf("stored cell: %w", err)
	}
	return c, b[len(b)-r.Remaining():], nil
}

// normal reports whether the parts are finite and Lo is below half an ulp of Hi.
func (s Sum) normal() bool {
	return !math.IsInf(s.Hi, 0) && s.Hi+s.Lo == s.Hi // false if either is no number
}

func count(r *wire.Reader) uint64 {
	n := r.U64()
	if n >= maxUnits {
		r.Fail("%d units, want below 2^53", n)
		return 0
	}
	return n
}

func readUsable(r *wire.Reader, dst []float64) {
	for i := range dst {
		dst[i] = r.F64()
	}
	if !Usable(dst) {
		r.Fail("numbers %v", dst)
	}
}

func allZero(xs []float64) bool {
	for _, x := range xs {
		if x != 0 {
			return false
		}
	}
	return true
}
