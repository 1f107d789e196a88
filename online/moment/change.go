package moment

import (
	"fmt"
	"slices"
)

// A Change is the difference that additions, retractions and replacements make to a
// group's sums, taken about zero, before they reach its Cell. Unlike a cell's, its
// number of units may be zero or negative while its sums are not.
type Change struct{ cell Cell }

// NewChange returns no change.
func NewChange(shape *Shape) *Change { return &Change{*NewCell(shape)} }

// Add notes that a unit with scores z joined. It reports false, and notes nothing,
// when z is not Usable; so do Retract and Replace.
func (c *Change) Add(z []float64) bool {
	if !c.cell.fits(z) {
		return false
	}
	c.cell.n++
	c.cell.apply(z, 1)
	return true
}

// Retract notes that a unit with scores z went.
func (c *Change) Retract(z []float64) bool {
	if !c.cell.fits(z) {
		return false
	}
	c.cell.n--
	c.cell.apply(z, -1)
	return true
}

// Replace notes that a unit's scores went from old to new.
func (c *Change) Replace(old, new []float64) bool {
	n := c.cell.n
	c.cell.n = 1
	ok := c.cell.Replace(old, new)
	c.cell.n = n
	return ok
}

// Reset forgets everything.
func (c *Change) Reset() { c.cell.Reset() }

// Apply makes a change to the cell. The cell must have origin zero.
//
//	error  wraps ErrShape when the two keep other co-moments; c is then unchanged
func (c *Cell) Apply(ch *Change) error {
	if !c.shape.same(ch.cell.shape) || c.origin != nil {
		return fmt.Errorf("moment: change of other sums: %w", ErrShape)
	}
	c.n += ch.cell.n
	for i, s := range ch.cell.sums {
		c.sums[i].AddSum(s)
	}
	if c.n == 0 {
		c.Reset()
	}
	return nil
}

// Unmerge takes away the units of o, which were merged before. Both must have one origin.
//
//	error  wraps ErrShape when the two keep other co-moments; c is then unchanged
func (c *Cell) Unmerge(o *Cell) error {
	if !c.shape.same(o.shape) || !slices.Equal(c.origin, o.origin) {
		return fmt.Errorf("moment: taking away other sums: %w", ErrShape)
	}
	c.n -= o.n
	for i, s := range o.sums {
		c.sums[i].Sub(s)
	}
	if c.n == 0 {
		c.Reset() // no rounding residue outlives the units
	}
	return nil
}
