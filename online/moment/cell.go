package moment

import (
	"fmt"
	"math"
	"slices"
)

// Limit is the least magnitude of a score that is refused: sums of third powers
// of what is below it cannot overflow, and an overflow could never be retracted.
const Limit = 0x1p+300

// Usable reports whether every score is a number below Limit.
func Usable(z []float64) bool {
	for _, x := range z {
		if !(math.Abs(x) < Limit) { // this way round, NaN is refused too
			return false
		}
	}
	return true
}

// A Cell holds n and the sums of one group of units. NewCell makes one; a Cell is
// not for concurrent use while it changes.
//
//	laws  Merge of an empty cell changes nothing, bit for bit; merging is
//	      commutative and associative, and Retract the inverse of Add, within the
//	      error of Sum (no error at all on data it calls exact); a cell from which
//	      everything has been retracted is as if new, bit for bit, but for its
//	      origin. That what is retracted was added before is not checked.
type Cell struct {
	shape  *Shape
	n      int64
	origin []float64 // nil for zero
	sums   []Sum     // A, then B, then T
}

// NewCell returns an empty cell with origin zero.
func NewCell(shape *Shape) *Cell {
	return &Cell{shape: shape, sums: make([]Sum, shape.sums())}
}

// SetOrigin fixes the point about which sums are taken, near which one expects
// the scores. It changes no result on paper; means far from the origin, beyond
// 1e12 standard deviations, lose digits without one.
//
//	error  the cell is not empty, the length is wrong, or a value is not Usable
func (c *Cell) SetOrigin(k []float64) error {
	if c.n != 0 {
		return fmt.Errorf("moment: origin of a cell that holds %d units; set it before the first", c.n)
	}
	if len(k) != c.shape.components || !Usable(k) {
		return fmt.Errorf("moment: origin %v, want %d finite numbers", k, c.shape.components)
	}
	c.origin = nil
	if slices.ContainsFunc(k, func(x float64) bool { return x != 0 }) {
		c.origin = slices.Clone(k)
	}
	return nil
}

// Shape returns the cell's shape.
func (c *Cell) Shape() *Shape { return c.shape }

// Units returns the number of units in the cell.
func (c *Cell) Units() int64 { return c.n }

// Add joins a unit with scores z. It reports false, and changes nothing, when z is
// not Usable. Panics if z has another length than the shape's vectors.
func (c *Cell) Add(z []float64) bool {
	if !c.fits(z) {
		return false
	}
	c.n++
	c.apply(z, 1)
	return true
}

// Retract takes away a unit that was added with scores z. It reports false, and
// changes nothing, when the cell is empty or z not Usable.
func (c *Cell) Retract(z []float64) bool {
	if !c.fits(z) || c.n == 0 {
		return false
	}
	if c.n == 1 {
		c.Reset() // no rounding residue outlives the units
		return true
	}
	c.n--
	c.apply(z, -1)
	return true
}

// Replace changes a unit's scores from old to new, at the cost of the components
// that differ. It reports false, and changes nothing, when the cell is empty or
// either is not Usable.
func (c *Cell) Replace(old, new []float64) bool {
	if !c.fits(old) || !c.fits(new) || c.n == 0 {
		return false
	}
	for i := range old {
		if old[i] != new[i] {
			c.sums[i].AddSum(c.shift(new, i))
			c.sums[i].Sub(c.shift(old, i))
		}
	}
	second := c.sums[len(old):]
	for at, p := range c.shape.pairs {
		i, j := p[0], p[1]
		if old[i] != new[i] || old[j] != new[j] {
			second[at].AddSum(c.shift(new, i).times(c.shift(new, j)))
			second[at].Sub(c.shift(old, i).times(c.shift(old, j)))
		}
	}
	third := second[len(c.shape.pairs):]
	for at, t := range c.shape.triples {
		i, j, k := t[0], t[1], t[2]
		if old[i] != new[i] || old[j] != new[j] || old[k] != new[k] {
			third[at].AddSum(c.shift(new, i).times(c.shift(new, j)).times(c.shift(new, k)))
			third[at].Sub(c.shift(old, i).times(c.shift(old, j)).times(c.shift(old, k)))
		}
	}
	return true
}

func (c *Cell) fits(z []float64) bool {
	if len(z) != c.shape.components {
		panic(fmt.Sprintf("moment: %d scores for a cell of %d", len(z), c.shape.components))
	}
	return Usable(z)
}

// shift returns z_i - K_i, exactly.
func (c *Cell) shift(z []float64, i int) Sum {
	if c.origin == nil {
		return Sum{Hi: z[i]}
	}
	return difference(z[i], c.origin[i])
}

// apply adds sign times the powers of a unit to the sums. Zero scores, the most
// common of all, cost a comparison.
func (c *Cell) apply(z []float64, sign float64) {
	first, second := c.sums[:len(z)], c.sums[len(z):]
	third := second[len(c.shape.pairs):]
	if c.origin == nil {
		for i, x := range z {
			first[i].Add(sign * x)
		}
		for at, p := range c.shape.pairs {
			if x, y := z[p[0]], z[p[1]]; x != 0 && y != 0 {
				second[at].AddProduct(sign*x, y)
			}
		}
	} else {
		for i := range z {
			first[i].AddSum(c.shift(z, i).scaled(sign))
		}
		for at, p := range c.shape.pairs {
			second[at].AddSum(c.shift(z, p[0]).times(c.shift(z, p[1])).scaled(sign))
		}
	}
	for at, t := range c.shape.triples {
		x, y, w := c.shift(z, t[0]), c.shift(z, t[1]), c.shift(z, t[2])
		if x.Hi != 0 && y.Hi != 0 && w.Hi != 0 {
			third[at].AddSum(x.times(y).times(w).scaled(sign))
		}
	}
}

// Reset empties the cell; the origin stays.
func (c *Cell) Reset() {
	c.n = 0
	clear(c.sums)
}

// CopyFrom makes c equal to o, origin included. Panics if the shapes differ.
func (c *Cell) CopyFrom(o *Cell) {
	if !c.shape.same(o.shape) {
		panic("moment: copy between cells of different shapes")
	}
	c.n = o.n
	copy(c.sums, o.sums)
	if o.origin == nil {
		c.origin = nil
	} else {
		c.origin = append(c.origin[:0], o.origin...)
	}
}

// Equal reports whether both hold the same state, bit for bit.
func (c *Cell) Equal(o *Cell) bool {
	return c.n == o.n && c.shape.same(o.shape) && slices.Equal(c.origin, o.origin) && slices.Equal(c.sums, o.sums)
}

// Merge adds the units of o, which is not changed. Where the origins differ, the
// sums of o are taken about c's origin first.
//
//	error  wraps ErrShape when the two keep other co-moments; c is then unchanged
func (c *Cell) Merge(o *Cell) error {
	if !c.shape.same(o.shape) {
		return fmt.Errorf("moment: merge of a cell of %d components, %d pairs and %d triples into one of %d, %d and %d: %w",
			o.shape.components, len(o.shape.pairs), len(o.shape.triples),
			c.shape.components, len(c.shape.pairs), len(c.shape.triples), ErrShape)
	}
	if o.n == 0 {
		return nil
	}
	if slices.Equal(c.origin, o.origin) {
		for i, s := range o.sums {
			c.sums[i].AddSum(s)
		}
	} else {
		c.mergeShifted(o)
	}
	c.n += o.n
	return nil
}

// mergeShifted adds o's sums about c's origin. With d the way from o's origin to
// c's, each factor of o's products is (z - K) less d; multiplied out.
func (c *Cell) mergeShifted(o *Cell) {
	n := Sum{Hi: float64(o.n)}
	d := func(i int) Sum {
		var to, from float64
		if c.origin != nil {
			to = c.origin[i]
		}
		if o.origin != nil {
			from = o.origin[i]
		}
		return difference(to, from)
	}
	size := c.shape.components
	a, b := o.sums[:size], o.sums[size:]
	for i := range a {
		s := a[i]
		s.Sub(d(i).times(n))
		c.sums[i].AddSum(s)
	}
	for at, p := range c.shape.pairs {
		di, dj := d(p[0]), d(p[1])
		s := b[at]
		s.Sub(di.times(a[p[1]]))
		s.Sub(dj.times(a[p[0]]))
		s.AddSum(di.times(dj).times(n))
		c.sums[size+at].AddSum(s)
	}
	t := b[len(c.shape.pairs):]
	for at, q := range c.shape.triples {
		i, j, k := q[0], q[1], q[2]
		di, dj, dk := d(i), d(j), d(k)
		s := t[at]
		s.Sub(di.times(b[c.shape.Pair(j, k)]))
		s.Sub(dj.times(b[c.shape.Pair(i, k)]))
		s.Sub(dk.times(b[c.shape.Pair(i, j)]))
		s.AddSum(di.times(dj).times(a[k]))
		s.AddSum(di.times(dk).times(a[j]))
		s.AddSum(dj.times(dk).times(a[i]))
		s.Sub(di.times(dj).times(dk).times(n))
		c.sums[size+len(c.shape.pairs)+at].AddSum(s)
	}
}
