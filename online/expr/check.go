package expr

import (
	"fmt"
	"slices"
	"strings"

	"github.com/expr-lang/expr/ast"
	"github.com/expr-lang/expr/parser/utils"
)

// level is what an expression is over; it decides what names mean.
type level uint8

const (
	overEvent level = iota // fields of one event
	overUnit               // tallies of one unit: inside mean()
	overMeans              // means over all units: outside mean()
)

// A checker turns the parser's tree into nodes and reports every fault on the way.
type checker struct {
	*source
	level   level
	tallies []Tally
	scores  []*Score
}

// at notes a fault at a node of the parser's tree and returns the node that
// stands for it.
func (c *checker) at(n ast.Node, format string, args ...any) (*Error, *node) {
	return c.fault(c.span(n), fmt.Sprintf(format, args...)), &node{op: opNum, typ: broken}
}

func (c *checker) expr(n ast.Node) *node {
	switch n := n.(type) {
	case *ast.IntegerNode:
		return num(float64(n.Value))
	case *ast.FloatNode:
		return num(n.Value)
	case *ast.BoolNode:
		return c.boolean(n)
	case *ast.StringNode:
		if c.level != overEvent {
			_, bad := c.at(n, "a text has no place in an estimate; tallies are numbers")
			return bad
		}
		return &node{op: opText, typ: text, name: n.Value}
	case *ast.IdentifierNode:
		return c.name(n, n.Value)
	case *ast.MemberNode:
		return c.member(n)
	case *ast.UnaryNode:
		return c.unary(n)
	case *ast.BinaryNode:
		return c.binary(n)
	case *ast.CallNode:
		return c.call(n)
	case *ast.NilNode:
		return c.null(n)
	case *ast.ArrayNode:
		_, bad := c.at(n, "a list stands only after in")
		return bad
	}
	_, bad := c.at(n, "no meaning here")
	return bad
}

func (c *checker) boolean(n *ast.BoolNode) *node {
	b := &node{op: opBool, typ: truth}
	if n.Value {
		b.num = 1
	}
	switch c.level {
	case overUnit:
		b.op, b.typ = opNum, bit
	case overMeans:
		_, b = c.at(n, "a mean is a number; true and false have a place inside mean() only")
	}
	return b
}

func (c *checker) null(n ast.Node) *node {
	e, bad := c.at(n, "null is absent, and nothing compares with what is absent; ?? gives an absent value another")
	e.Suggestion = "(a ?? 0)"
	return bad
}

// name is a field, or a tally, that stands there by its plain name.
func (c *checker) name(n ast.Node, name string) *node {
	if name == "null" {
		return c.null(n)
	}
	if c.level == overEvent {
		return &node{op: opField, name: name}
	}
	for i, t := range c.tallies {
		if t.Name != name {
			continue
		}
		if c.level == overMeans {
			e, bad := c.at(n, "a tally differs between units; an estimate takes its mean over them")
			e.Suggestion = "mean(" + name + ")"
			return bad
		}
		leaf := &node{op: opTally, typ: number, name: name, slot: i}
		if t.Binary {
			leaf.typ = bit
		}
		return leaf
	}
	e, bad := c.at(n, "unknown tally")
	names := make([]string, len(c.tallies))
	for i, t := range c.tallies {
		names[i] = t.Name
	}
	e.Allowed, e.Suggestion = strings.Join(names, ", "), Nearest(name, names)
	if fn, ok := functions[name]; ok && e.Suggestion == "" && slices.Contains(functionNames[c.level], name) {
		e.Message = fmt.Sprintf("%s is a function; it takes %s in parentheses", name, fn.takes())
	}
	return bad
}

// member is a dotted path.
func (c *checker) member(n *ast.MemberNode) *node {
	if c.level != overEvent {
		_, bad := c.at(n, "a tally has a plain name, without dots")
		return bad
	}
	key, ok := n.Property.(*ast.StringNode)
	if !ok || c.word(n.Location()) == "[" {
		_, bad := c.at(n, `no index can be taken; a field with an odd name is written field("…")`)
		return bad
	}
	of := c.expr(n.Node)
	switch {
	case of.typ == broken:
		return of
	case of.op != opField:
		_, bad := c.at(n, "only a field of the event has fields below it")
		return bad
	}
	return &node{op: opField, name: of.name + "." + key.Value}
}

func (c *checker) unary(n *ast.UnaryNode) *node {
	if n.Operator == "+" {
		return c.number(n.Node)
	}
	if n.Operator == "-" {
		return c.settle(n, &node{op: opNeg, typ: number, args: []*node{c.number(n.Node)}})
	}
	if c.level == overMeans {
		return c.notSmooth(n, n.Operator)
	}
	if in, ok := n.Node.(*ast.BinaryNode); ok && in.Operator == "in" && in.Location() == n.Location() {
		return c.list(in, opNotIn) // not in: one operator of two words
	}
	return c.settle(n, &node{op: opNot, typ: c.truth(), args: []*node{c.condition(n.Node)}})
}

// truth is the type of a condition on this level.
func (c *checker) truth() typ {
	if c.level == overUnit {
		return bit
	}
	return truth
}

func (c *checker) notSmooth(n ast.Node, what string) *node {
	_, bad := c.at(n, "%s outside mean() is not smooth: the estimate would have no derivative everywhere, and so no standard error; "+
		"it may stand inside mean(), over the tallies of one unit", what)
	return bad
}

func (c *checker) binary(n *ast.BinaryNode) *node {
	o, ok := operator[n.Operator]
	if !ok {
		_, bad := c.at(n, "no such operator: %s", n.Operator)
		return bad
	}
	if o == opAnd {
		if w := c.word(n.Location()); w != "&&" && w != "and" {
			e, bad := c.at(n, "comparisons do not chain; join two of them by &&")
			e.Suggestion = "a < b && b < c"
			return bad
		}
	}
	if c.level == overMeans && !o.takesTwo() {
		return c.notSmooth(n, n.Operator)
	}
	switch o {
	case opIn:
		return c.list(n, opIn)
	case opCompare:
		return c.compare(n)
	case opElse:
		return c.otherwise(n)
	case opAnd, opOr:
		return c.settle(n, &node{op: o, typ: c.truth(), args: []*node{c.condition(n.Left), c.condition(n.Right)}})
	}
	l, r := c.number(n.Left), c.number(n.Right)
	if o == opDiv && r.isNum(0) && r.typ != broken {
		_, bad := c.at(n, "a division by zero")
		return bad
	}
	if o == opPow && c.level == overMeans && l.op == opNum && l.num <= 0 && r.op != opNum && l.typ != broken {
		_, bad := c.at(n, "a power whose exponent is not constant needs a base above zero")
		return bad
	}
	return c.settle(n, &node{op: o, typ: number, args: []*node{l, r}})
}

// settle folds constants. What has a broken part is broken.
func (c *checker) settle(n ast.Node, x *node) *node {
	for _, a := range x.args {
		if a.typ == broken {
			return a
		}
	}
	x = fold(x)
	if x.op == opNum && !finite(x.num) {
		_, bad := c.at(n, "no finite value")
		return bad
	}
	return x
}

// number checks an operand of arithmetic.
func (c *checker) number(n ast.Node) *node {
	x := c.expr(n)
	if x.typ == text {
		_, x = c.at(n, "a text cannot be calculated with")
	}
	return x
}

// condition checks an operand of && || ! and a whole filter.
func (c *checker) condition(n ast.Node) *node {
	x := c.expr(n)
	if x.typ == number || x.typ == text {
		e, bad := c.at(n, "%s is no condition; compare it with something", x.typ.article())
		if x.op == opTally {
			e.Suggestion = x.name + " > 0"
		}
		return bad
	}
	return x
}

func (c *checker) compare(n *ast.BinaryNode) *node {
	l, r := c.expr(n.Left), c.expr(n.Right)
	x := c.settle(n, &node{op: opCompare, typ: c.truth(), holds: comparison[n.Operator], args: []*node{l, r}})
	if x.typ == broken || c.level != overEvent {
		return x
	}
	if l.typ != unknown && r.typ != unknown && l.typ != r.typ {
		_, bad := c.at(n, "%s is compared with %s, which is never true", l.typ.article(), r.typ.article())
		return bad
	}
	if (l.typ == truth || r.typ == truth) && x.holds.ordered() {
		_, bad := c.at(n, "true and false have no order; compare them by == or !=")
		return bad
	}
	return x
}

// otherwise is a ?? b.
func (c *checker) otherwise(n *ast.BinaryNode) *node {
	l, r := c.expr(n.Left), c.expr(n.Right)
	x := c.settle(n, &node{op: opElse, typ: l.typ, args: []*node{l, r}})
	switch {
	case x.typ == broken || l.typ == r.typ:
	case l.typ == unknown: // the other side tells what the field is meant to be
		x.typ = r.typ
	case r.typ == unknown:
	case l.typ.isNumber() && r.typ.isNumber(): // a truth only if both are
		x.typ = number
		if isBit(l) && isBit(r) {
			x.typ = bit
		}
	default:
		_, x = c.at(n, "%s cannot stand for %s", r.typ.article(), l.typ.article())
	}
	return x
}

// list is x in [..] or x not in [..].
func (c *checker) list(n *ast.BinaryNode, o op) *node {
	l := c.expr(n.Left)
	x := &node{op: o, typ: c.truth(), args: []*node{l}}
	list, ok := n.Right.(*ast.ArrayNode)
	if !ok || len(list.Nodes) == 0 {
		e, bad := c.at(n.Right, "after in stands a list of texts or of numbers")
		e.Suggestion = `["a", "b"]`
		return bad
	}
	for _, item := range list.Nodes {
		switch v := c.expr(item); {
		case v.typ == broken:
			l = v
		case v.op == opNum:
			x.nums = append(x.nums, v.num)
		case v.op == opText:
			x.texts = append(x.texts, v.name)
		default:
			_, l = c.at(item, "only texts and numbers, written out, stand in a list")
		}
	}
	switch {
	case l.typ == broken:
		return l
	case len(x.nums) > 0 && len(x.texts) > 0:
		_, bad := c.at(list, "a list holds texts or numbers, not both")
		return bad
	case c.level == overEvent && l.typ == truth,
		l.typ == text && len(x.nums) > 0, l.typ == number && len(x.texts) > 0:
		_, bad := c.at(n, "%s is in no such list", l.typ.article())
		return bad
	}
	return x
}

// ValidName says whether a tally may have this name: a plain word that is none
// of the grammar's own.
func ValidName(name string) bool {
	switch name {
	case "and", "or", "not", "in", "matches", "contains", "startsWith", "endsWith", "let",
		"true", "false", "nil", "null":
		return false
	}
	return utils.IsValidIdentifier(name)
}
