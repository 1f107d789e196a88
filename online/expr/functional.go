package expr

import "math"

// A Functional is a smooth function of the means m of an estimate's scores.
type Functional struct {
	root   *node
	grad   []*node // its partial derivatives, by score
	scores []*Score
}

func newFunctional(root *node, scores []*Score) Functional {
	f := Functional{root: root, scores: scores, grad: make([]*node, len(scores))}
	for i := range f.grad {
		f.grad[i] = derivative(root, i)
	}
	return f
}

// Eval returns the value at m, one mean a score. It is not finite where the
// functional is not defined.
func (f *Functional) Eval(m []float64) float64 { return f.root.at(m) }

// Gradient writes the exact partial derivatives at m to dst, one a score, and
// returns the value. They are not finite where the functional is not smooth.
func (f *Functional) Gradient(m, dst []float64) float64 {
	for i, g := range f.grad {
		dst[i] = g.at(m)
	}
	return f.root.at(m)
}

// String is the functional in the grammar of the file, with fixed spacing.
func (f *Functional) String() string { return f.root.text(f.scores) }

// at evaluates a node over means.
func (n *node) at(m []float64) float64 {
	switch {
	case n.op == opNum:
		return n.num
	case n.op == opMean:
		return m[n.slot]
	case n.op.takesOne():
		return arith1[n.op](n.args[0].at(m))
	}
	return arith2[n.op](n.args[0].at(m), n.args[1].at(m))
}

// derivative differentiates a node over means by mean i. The result shares parts
// with the node.
func derivative(n *node, i int) *node {
	switch n.op {
	case opNum:
		return num(0)
	case opMean:
		if n.slot == i {
			return num(1)
		}
		return num(0)
	}
	u := n.args[0]
	du := derivative(u, i)
	switch n.op {
	case opNeg:
		return minus(du)
	case opLog:
		return over(du, u)
	case opExp:
		return times(n, du)
	case opSqrt:
		return over(du, times(num(2), n))
	}
	v := n.args[1]
	dv := derivative(v, i)
	switch n.op {
	case opAdd:
		return plus(du, dv)
	case opSub:
		return plus(du, minus(dv))
	case opMul:
		return plus(times(du, v), times(u, dv))
	case opDiv: // (du - n dv) / v
		return over(plus(du, minus(times(n, dv))), v)
	}
	switch { // opPow
	case v.op == opNum:
		return times(times(v, power(u, v.num-1)), du)
	case u.op == opNum:
		return times(times(num(math.Log(u.num)), n), dv)
	}
	return times(n, plus(times(dv, &node{op: opLog, args: []*node{u}}), over(times(v, du), u)))
}

// plus, minus, times, over and power build nodes over means without the parts
// that a derivative is full of: zeros, ones and double signs.

func plus(x, y *node) *node {
	switch {
	case x.isNum(0):
		return y
	case y.isNum(0):
		return x
	case y.op == opNeg:
		return fold(&node{op: opSub, args: []*node{x, y.args[0]}})
	case y.op == opNum && y.num < 0:
		return fold(&node{op: opSub, args: []*node{x, num(-y.num)}})
	case y.op == opMul && y.args[0].op == opNum && y.args[0].num < 0:
		return fold(&node{op: opSub, args: []*node{x, times(num(-y.args[0].num), y.args[1])}})
	}
	return fold(&node{op: opAdd, args: []*node{x, y}})
}

func minus(x *node) *node {
	switch {
	case x.op == opNeg:
		return x.args[0]
	case x.op == opMul && x.args[0].op == opNum:
		return times(num(-x.args[0].num), x.args[1])
	}
	return fold(&node{op: opNeg, args: []*node{x}})
}

func times(x, y *node) *node {
	switch {
	case x.isNum(0) || y.isNum(0):
		return num(0)
	case x.isNum(1):
		return y
	case y.isNum(1):
		return x
	case x.isNum(-1):
		return minus(y)
	case x.op == opNeg:
		return minus(times(x.args[0], y))
	case y.op == opNeg:
		return minus(times(x, y.args[0]))
	case x.op == opDiv:
		return over(times(x.args[0], y), x.args[1])
	case y.op == opDiv:
		return over(times(x, y.args[0]), y.args[1])
	case y.op == opNum && x.op != opNum: // constants come first
		return times(y, x)
	case x.op == opNum && y.op == opMul && y.args[0].op == opNum:
		return times(num(x.num*y.args[0].num), y.args[1])
	}
	return fold(&node{op: opMul, args: []*node{x, y}})
}

func over(x, y *node) *node {
	switch {
	case x.isNum(0):
		return x
	case y.isNum(1):
		return x
	case x.op == opNeg:
		return minus(over(x.args[0], y))
	}
	return fold(&node{op: opDiv, args: []*node{x, y}})
}

func power(x *node, e float64) *node {
	switch e {
	case 0:
		return num(1)
	case 1:
		return x
	}
	return fold(&node{op: opPow, args: []*node{x, num(e)}})
}

// isWhole says whether an exponent is a constant 0, 1, 2, ..., for which a power
// is smooth everywhere.
func isWhole(n *node) bool {
	return n.op == opNum && n.num >= 0 && n.num == math.Trunc(n.num)
}
