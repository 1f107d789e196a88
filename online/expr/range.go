package expr

import "math"

// bounds are what is known of a score: it lies in [lo, hi] where it is present,
// and it is sure to be present.
type bounds struct {
	lo, hi float64
	sure   bool
}

// rangeOf finds the bounds of a score by interval arithmetic, up to the rounding
// of logarithms, exponentials and powers.
func rangeOf(n *node, tallies []Tally) bounds {
	everything := bounds{math.Inf(-1), math.Inf(1), true}
	switch n.op {
	case opNum:
		return bounds{n.num, n.num, true}
	case opTally:
		t := tallies[n.slot]
		b := bounds{math.Inf(-1), math.Inf(1), !t.MayBeAbsent}
		switch {
		case t.Binary:
			b.lo, b.hi = 0, 1
		case t.NonNegative:
			b.lo = 0
		}
		return b
	}
	a := rangeOf(n.args[0], tallies)
	switch n.op {
	case opNeg:
		return bounds{-a.hi, -a.lo, a.sure}
	case opAbs:
		if a.lo >= 0 {
			return a
		}
		return bounds{max(0, -a.hi), max(-a.lo, a.hi), a.sure}
	case opLog:
		return bounds{math.Log(max(0, a.lo)), math.Log(max(0, a.hi)), a.sure && a.lo > 0}
	case opSqrt:
		return bounds{math.Sqrt(max(0, a.lo)), math.Sqrt(max(0, a.hi)), a.sure && a.lo >= 0}
	case opExp:
		return bounds{math.Exp(a.lo), math.Exp(a.hi), a.sure && finite(math.Exp(a.hi))}
	case opIn, opNotIn, opNot:
		return bounds{0, 1, a.sure}
	}
	b := rangeOf(n.args[1], tallies)
	sure := a.sure && b.sure
	switch n.op {
	case opAdd:
		return bounds{a.lo + b.lo, a.hi + b.hi, sure}
	case opSub:
		return bounds{a.lo - b.hi, a.hi - b.lo, sure}
	case opMul:
		return corners(timesBound, a, b, sure)
	case opDiv:
		if b.lo > 0 || b.hi < 0 {
			return corners(func(x, y float64) float64 { return timesBound(x, 1/y) }, a, b, sure).widened()
		}
	case opPow:
		return rangeOfPower(a, b, sure)
	case opMin:
		return bounds{min(a.lo, b.lo), min(a.hi, b.hi), sure}
	case opMax:
		return bounds{max(a.lo, b.lo), max(a.hi, b.hi), sure}
	case opCompare, opAnd, opOr:
		return bounds{0, 1, sure}
	case opElse:
		return bounds{min(a.lo, b.lo), max(a.hi, b.hi), a.sure || b.sure}
	}
	everything.sure = false // a divisor that may be zero
	return everything
}

// timesBound is the product with 0 times infinity 0, as a bound needs it.
func timesBound(x, y float64) float64 {
	if x == 0 || y == 0 {
		return 0
	}
	return x * y
}

func corners(f func(x, y float64) float64, a, b bounds, sure bool) bounds {
	p, q, r, s := f(a.lo, b.lo), f(a.lo, b.hi), f(a.hi, b.lo), f(a.hi, b.hi)
	return bounds{min(p, q, r, s), max(p, q, r, s), sure}
}

// widened makes up for the rounding of a reciprocal.
func (b bounds) widened() bounds {
	b.lo -= math.Abs(b.lo) * 1e-15
	b.hi += math.Abs(b.hi) * 1e-15
	return b
}

// huge is the magnitude up to which powers are expected to be finite.
const huge = 1e30

// rangeOfPower knows bases of one sign and exponents that are whole constants.
func rangeOfPower(a, b bounds, sure bool) bounds {
	r := bounds{math.Inf(-1), math.Inf(1), false}
	whole := b.lo == b.hi && b.lo == math.Trunc(b.lo)
	if a.lo >= 0 || whole && math.Mod(b.lo, 2) == 0 {
		r.lo = 0
	}
	hi := min(a.hi, huge)
	switch {
	case whole && b.lo >= 0:
		r.sure = sure && finite(math.Pow(min(max(-a.lo, a.hi), huge), b.lo))
	case whole && (a.lo > 0 || a.hi < 0):
		r.sure = sure && finite(math.Pow(min(math.Abs(a.lo), math.Abs(a.hi)), b.lo))
	case a.lo > 0, a.lo >= 0 && b.lo >= 0:
		r.sure = sure && finite(max(math.Pow(a.lo, b.lo), math.Pow(a.lo, b.hi), math.Pow(hi, b.lo), math.Pow(hi, b.hi)))
	}
	return r
}

// isBit says whether a score is known to be 0 or 1 where it is present.
func isBit(n *node) bool {
	switch n.op {
	case opNum:
		return n.num == 0 || n.num == 1
	case opMul, opMin, opMax, opElse:
		return isBit(n.args[0]) && isBit(n.args[1])
	case opAbs:
		return isBit(n.args[0])
	case opSub:
		return n.args[0].isNum(1) && isBit(n.args[1])
	}
	return n.typ == bit
}
