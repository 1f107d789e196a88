package online

import (
	"stillwell/online/moment"
	"stillwell/online/units"
)

// changes remembers, for each row touched in a step, the vector it had before, so that
// the provisional sums take one replacement a unit and step, however many events it had.
type changes struct {
	width int
	rows  []units.Row
	had   []bool    // false: the unit entered in this step
	old   []float64 // width a row
	z     []float64

	shape  *moment.Shape
	groups map[sumsKey]int // -> index in deltas
	deltas []Delta
	spare  []*moment.Change
}

// A Delta is the change of the provisional sums of one group in one step.
type Delta struct {
	Arm   uint8
	Seg   uint16 // the shard's number; 0: everyone
	Power uint8  // of two, the weight of its units
	Sums  *moment.Change
}

func (c *changes) init(l *layout) {
	c.width, c.shape = l.width, l.provisional
	c.z = make([]float64, l.width)
	c.groups = map[sumsKey]int{}
}

// touch is called before a row's values change.
func (c *changes) touch(t *units.Table, r units.Row, l *layout) {
	if t.Flags(r)&rowChanged != 0 {
		return
	}
	t.SetFlags(r, rowChanged)
	l.vector(t.Values(r), c.z)
	c.rows = append(c.rows, r)
	c.had = append(c.had, true)
	c.old = append(c.old, c.z...)
}

// fresh is called when a unit has entered.
func (c *changes) fresh(t *units.Table, r units.Row) {
	t.SetFlags(r, rowChanged)
	c.rows = append(c.rows, r)
	c.had = append(c.had, false)
	c.old = append(c.old, c.z...)
}

// settle turns the step's changes into deltas by group, in order of first change.
// They are valid until the next settle.
func (c *changes) settle(t *units.Table, l *layout) []Delta {
	for _, d := range c.deltas {
		d.Sums.Reset()
		c.spare = append(c.spare, d.Sums)
	}
	c.deltas = c.deltas[:0]
	clear(c.groups)
	for i, r := range c.rows {
		t.ClearFlags(r, rowChanged)
		old := c.old[i*c.width : (i+1)*c.width]
		left := t.State(r) == units.Left
		if left && !c.had[i] {
			continue
		}
		l.vector(t.Values(r), c.z)
		arm, seg := t.Group(r)
		c.record(sumsKey{arm, 0, t.Power(r)}, c.had[i], left, old)
		if seg != 0 {
			c.record(sumsKey{arm, seg, t.Power(r)}, c.had[i], left, old)
		}
	}
	c.rows, c.had, c.old = emptied(c.rows), emptied(c.had), emptied(c.old)
	return c.deltas
}

func (c *changes) record(g sumsKey, had, left bool, old []float64) {
	k, ok := c.groups[g]
	if !ok {
		k = len(c.deltas)
		c.groups[g] = k
		var sums *moment.Change
		if n := len(c.spare); n > 0 {
			sums, c.spare = c.spare[n-1], c.spare[:n-1]
		} else {
			sums = moment.NewChange(c.shape)
		}
		c.deltas = append(c.deltas, Delta{g.arm, g.seg, g.power, sums})
	}
	switch sums := c.deltas[k].Sums; {
	case left:
		sums.Retract(old)
	case had:
		sums.Replace(old, c.z)
	default:
		sums.Add(c.z)
	}
}
