package expr

import "math"

// op is what a node does.
type op uint8

const (
	opNum op = iota
	opText
	opBool
	opField
	opTally
	opMean
	opNeg
	opAbs
	opLog
	opExp
	opSqrt
	opAdd
	opSub
	opMul
	opDiv
	opPow
	opMin
	opMax
	opCompare
	opIn
	opNotIn
	opNot
	opAnd
	opOr
	opElse
)

// arith1 and arith2 are the arithmetic of all three uses.
var arith1 = [...]func(float64) float64{
	opNeg:  func(x float64) float64 { return -x },
	opAbs:  math.Abs,
	opLog:  math.Log,
	opExp:  math.Exp,
	opSqrt: math.Sqrt,
}

var arith2 = [...]func(x, y float64) float64{
	opAdd: func(x, y float64) float64 { return x + y },
	opSub: func(x, y float64) float64 { return x - y },
	opMul: func(x, y float64) float64 { return x * y },
	opDiv: func(x, y float64) float64 { return x / y },
	opPow: math.Pow,
	opMin: func(x, y float64) float64 { return min(x, y) },
	opMax: func(x, y float64) float64 { return max(x, y) },
}

func (o op) takesOne() bool { return opNeg <= o && o <= opSqrt }
func (o op) takesTwo() bool { return opAdd <= o && o <= opMax }

var operator = map[string]op{
	"+": opAdd, "-": opSub, "*": opMul, "/": opDiv, "**": opPow,
	"&&": opAnd, "and": opAnd, "||": opOr, "or": opOr, "??": opElse, "in": opIn,
	"==": opCompare, "!=": opCompare, "<": opCompare, "<=": opCompare, ">": opCompare, ">=": opCompare,
}

// relation is how two values lie to each other: a comparison is the set of
// relations for which it holds. Values of different types lie in none.
type relation uint8

const (
	less relation = 1 << iota
	equal
	greater
	same  // equal, of a type without order
	apart // not equal, of a type without order
)

var comparison = map[string]relation{
	"==": equal | same, "!=": less | greater | apart,
	"<": less, "<=": less | equal, ">": greater, ">=": greater | equal,
}

// ordered says whether a comparison asks for more than equality.
func (r relation) ordered() bool { return r&(same|apart) == 0 }

// String is the comparison's sign.
func (r relation) String() string {
	for sign, holds := range comparison {
		if holds == r {
			return sign
		}
	}
	return ""
}

// relate is none for NaN.
func relate(x, y float64) relation {
	switch {
	case x < y:
		return less
	case x > y:
		return greater
	case x == y:
		return equal
	}
	return 0
}

// mirrored is the comparison with its sides exchanged.
func (r relation) mirrored() relation { return r&^(less|greater) | r&less<<2 | r&greater>>2 }

// typ is what is known of a node's value beforehand.
type typ uint8

const (
	unknown typ = iota // a field: seen only when an event is there
	number
	text
	truth
	bit    // over tallies: 1 or 0, a number and a truth
	broken // a fault is reported already
)

func (t typ) isNumber() bool { return t == number || t == bit }

// article names a type in messages.
func (t typ) article() string {
	return [...]string{unknown: "a field", number: "a number", text: "a text", truth: "a condition", bit: "a condition"}[t]
}

// A node is an expression after the check.
type node struct {
	op    op
	typ   typ
	holds relation // of opCompare
	num   float64  // of opNum; 1 or 0 of opBool
	name  string   // of opText its text, of opField and opTally the name
	slot  int      // of opField, opTally and, for the score, of opMean
	args  []*node
	nums  []float64 // of opIn and opNotIn over numbers
	texts []string  // of opIn and opNotIn over texts
}

func num(v float64) *node { return &node{op: opNum, typ: number, num: v} }

func (n *node) isNum(v float64) bool { return n.op == opNum && n.num == v }

// walk calls f for the node and all below it, from left to right.
func (n *node) walk(f func(*node)) {
	f(n)
	for _, a := range n.args {
		a.walk(f)
	}
}

// has says whether an op occurs in the tree.
func (n *node) has(o op) bool {
	found := false
	n.walk(func(x *node) { found = found || x.op == o })
	return found
}

func finite(x float64) bool { return x-x == 0 }

// fold replaces arithmetic of constants by its value.
func fold(n *node) *node {
	for _, a := range n.args {
		if a.op != opNum {
			return n
		}
	}
	switch {
	case n.op.takesOne():
		return num(arith1[n.op](n.args[0].num))
	case n.op.takesTwo():
		return num(arith2[n.op](n.args[0].num, n.args[1].num))
	}
	return n
}
