package expr

import (
	"math"
	"slices"
	"strconv"
	"strings"
)

// How tightly an operator binds, in the order of the grammar; only ?? is always
// given parentheses beside other operators, as the grammar demands on one side.
const (
	bindElse = iota
	bindOr
	bindAnd
	bindCompare
	bindSum
	bindNot
	bindProduct
	bindSign
	bindPower
	bindAtom
)

var sign = [...]string{
	opAdd: "+", opSub: "-", opMul: "*", opDiv: "/", opPow: "**",
	opIn: "in", opNotIn: "not in", opAnd: "&&", opOr: "||", opElse: "??",
}

var functionName = [...]string{
	opMean: "mean", opAbs: "abs", opLog: "log", opExp: "exp", opSqrt: "sqrt", opMin: "min", opMax: "max",
}

func (n *node) binding() int {
	switch n.op {
	case opOr:
		return bindOr
	case opAnd:
		return bindAnd
	case opElse:
		return bindElse
	case opCompare, opIn, opNotIn:
		return bindCompare
	case opAdd, opSub:
		return bindSum
	case opNot:
		return bindNot
	case opMul, opDiv:
		return bindProduct
	case opNeg:
		return bindSign
	case opPow:
		return bindPower
	case opNum:
		if math.Signbit(n.num) {
			return bindSign
		}
	}
	return bindAtom
}

// A printer writes nodes over tallies, or over means of the given scores.
type printer struct {
	strings.Builder
	scores []*Score
}

// String writes a node over tallies as the file would have it.
func (n *node) String() string { return n.text(nil) }

func (n *node) text(scores []*Score) string {
	p := &printer{scores: scores}
	p.node(n)
	return p.Builder.String()
}

// part writes an operand, in parentheses if it binds less than least.
func (p *printer) part(n *node, least int) {
	if n.binding() >= least {
		p.node(n)
		return
	}
	p.WriteByte('(')
	p.node(n)
	p.WriteByte(')')
}

func (p *printer) node(n *node) {
	b := n.binding()
	switch n.op {
	case opNum:
		p.WriteString(formatNumber(n.num))
	case opTally:
		p.WriteString(n.name)
	case opMean:
		p.WriteString("mean(" + p.scores[n.slot].text + ")")
	case opNeg:
		p.WriteByte('-')
		p.part(n.args[0], bindPower)
	case opNot:
		p.WriteByte('!')
		p.part(n.args[0], bindAtom)
	case opIn, opNotIn:
		p.part(n.args[0], b+1)
		p.WriteString(" " + sign[n.op] + " [")
		for i, v := range n.nums {
			if i > 0 {
				p.WriteString(", ")
			}
			p.WriteString(formatNumber(v))
		}
		p.WriteByte(']')
	case opCompare:
		p.infix(n, n.holds.String(), b+1, b+1)
	case opElse:
		p.infix(n, sign[n.op], bindAtom, bindAtom)
	case opPow:
		p.infix(n, sign[n.op], b+1, b)
	case opAdd, opSub, opMul, opDiv, opAnd, opOr:
		p.infix(n, sign[n.op], b, b+1)
	default:
		p.WriteString(functionName[n.op] + "(")
		for i, a := range arguments(n) {
			if i > 0 {
				p.WriteString(", ")
			}
			p.node(a)
		}
		p.WriteByte(')')
	}
}

func (p *printer) infix(n *node, sign string, left, right int) {
	p.part(n.args[0], left)
	p.WriteString(" " + sign + " ")
	p.part(n.args[1], right)
}

// arguments lists what a function was called with: of many, the first two are
// nested deepest.
func arguments(n *node) []*node {
	if len(n.args) == 2 && n.args[0].op == n.op {
		return append(arguments(n.args[0]), n.args[1])
	}
	return n.args
}

// flat lists the operands of nested equal operators that associate exactly.
func flat(n *node, o op) []*node {
	if n.op != o {
		return []*node{n}
	}
	return append(flat(n.args[0], o), flat(n.args[1], o)...)
}

func formatNumber(v float64) string {
	if a := math.Abs(v); a != 0 && (a < 1e-5 || a >= 1e15) {
		return strconv.FormatFloat(v, 'e', -1, 64)
	}
	return strconv.FormatFloat(v, 'f', -1, 64)
}

// canonical writes a node so that expressions whose values are equal to the last
// bit, by exchange of operands or of the sides of a comparison, read the same.
func canonical(n *node) string {
	switch n.op {
	case opNum:
		return formatNumber(n.num)
	case opTally:
		return n.name
	case opMean:
		return "#" + strconv.Itoa(n.slot)
	case opIn, opNotIn:
		nums := slices.Clone(n.nums)
		slices.Sort(nums)
		list := ""
		for _, v := range slices.Compact(nums) {
			list += " " + formatNumber(v)
		}
		return "(" + sign[n.op] + " " + canonical(n.args[0]) + list + ")"
	}
	parts, name := n.args, ""
	switch n.op {
	case opMin, opMax, opAnd, opOr:
		parts = flat(n, n.op)
	}
	keys := make([]string, len(parts))
	for i, a := range parts {
		keys[i] = canonical(a)
	}
	switch n.op {
	case opCompare:
		holds := n.holds
		if holds&(less|greater) == greater {
			holds = holds.mirrored()
			slices.Reverse(keys)
		}
		name = holds.String()
		if !n.holds.ordered() {
			slices.Sort(keys)
		}
	case opNeg:
		name = "neg"
	case opNot:
		name = "!"
	case opAdd, opMul, opMin, opMax, opAnd, opOr:
		slices.Sort(keys)
		fallthrough
	default:
		if name = functionNameOf(n.op); name == "" {
			name = sign[n.op]
		}
	}
	return "(" + name + " " + strings.Join(keys, " ") + ")"
}

func functionNameOf(o op) string {
	if int(o) < len(functionName) {
		return functionName[o]
	}
	return ""
}
