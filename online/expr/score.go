package expr

import (
	"math"
	"slices"
)

// A Tally is what an estimate may know of a unit's tally beforehand.
type Tally struct {
	Name        string
	MayBeAbsent bool // units may lack it, as they may a first or a minimum
	Binary      bool // 0 or 1
	NonNegative bool // never below 0, as a count
}

// A Score is a compiled expression over one unit's tallies.
type Score struct {
	root    *node
	eval    func([]float64) float64
	tallies []int
	absent  bool
	text    string
	key     string
}

func newScore(root *node, tallies []Tally) *Score {
	s := &Score{root: root, eval: compileScore(root), text: root.String(), key: canonical(root)}
	root.walk(func(n *node) {
		if n.op == opTally {
			s.tallies = append(s.tallies, n.slot)
		}
	})
	slices.Sort(s.tallies)
	s.tallies = slices.Compact(s.tallies)
	s.absent = !rangeOf(root, tallies).sure
	return s
}

// Eval returns the score of a unit with these tallies, by index, NaN being
// absent. It is present, and then finite, unless a tally that it needs is absent
// or an operation has no finite result, and no ?? gives a value for that.
func (s *Score) Eval(t []float64) (v float64, present bool) {
	v = s.eval(t)
	return v, v == v
}

// Binary says whether the score is known to be 0 or 1 where it is present.
func (s *Score) Binary() bool { return isBit(s.root) }

// MayBeAbsent says whether units may lack the score: because of their tallies, or
// because a divisor may be zero, a logarithm's argument not positive, a root's
// negative, an exponential or a power beyond the largest number. It is known from
// the ranges of the tallies; that sums and products overflow is not considered, nor
// that powers do of numbers beyond 1e30.
func (s *Score) MayBeAbsent() bool { return s.absent }

// Tallies are the indexes of the tallies that the score depends on, ascending;
// the caller must not change them.
func (s *Score) Tallies() []int { return s.tallies }

// String is the score in the grammar of the file, with fixed spacing.
func (s *Score) String() string { return s.text }

// compileScore compiles a node over tallies; NaN is absent.
func compileScore(n *node) func([]float64) float64 {
	switch n.op {
	case opNum:
		v := n.num
		return func([]float64) float64 { return v }
	case opTally:
		i := n.slot
		return func(t []float64) float64 { return finiteOrAbsent(t[i]) }
	case opIn, opNotIn:
		return scoreMembership(n)
	}
	a := compileScore(n.args[0])
	if n.op.takesOne() {
		f := arith1[n.op]
		return func(t []float64) float64 { return finiteOrAbsent(f(a(t))) }
	}
	if n.op == opNot {
		return func(t []float64) float64 { return 1 - a(t) }
	}
	b := compileScore(n.args[1])
	if n.op.takesTwo() {
		f := arith2[n.op]
		return func(t []float64) float64 {
			x, y := a(t), b(t)
			if x != x || y != y { // before f: 1 to the power of NaN is 1
				return math.NaN()
			}
			return finiteOrAbsent(f(x, y))
		}
	}
	switch n.op {
	case opCompare:
		holds := n.holds
		return func(t []float64) float64 {
			r := relate(a(t), b(t))
			if r == 0 {
				return math.NaN()
			}
			return oneIf(holds&r != 0)
		}
	case opAnd:
		return func(t []float64) float64 { return kleene(a, b, t, 0) }
	case opOr:
		return func(t []float64) float64 { return kleene(a, b, t, 1) }
	}
	return func(t []float64) float64 { // opElse
		if v := a(t); v == v {
			return v
		}
		return b(t)
	}
}

// kleene is && with the decisive value 0, and || with 1.
func kleene(a, b func([]float64) float64, t []float64, decisive float64) float64 {
	x := a(t)
	if x == decisive {
		return x
	}
	y := b(t)
	if y == decisive {
		return y
	}
	return x + y - (1 - decisive) // both are the other value, or one is absent
}

func scoreMembership(n *node) func([]float64) float64 {
	a, nums, found := compileScore(n.args[0]), n.nums, n.op == opIn
	return func(t []float64) float64 {
		x := a(t)
		if x != x {
			return x
		}
		return oneIf(slices.Contains(nums, x) == found)
	}
}

func oneIf(b bool) float64 {
	if b {
		return 1
	}
	return 0
}

func finiteOrAbsent(x float64) float64 {
	if !finite(x) {
		return math.NaN()
	}
	return x
}
