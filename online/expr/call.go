package expr

import (
	"fmt"
	"slices"
	"strings"

	"github.com/expr-lang/expr/ast"
)

// function gives the op and the number of arguments; most < 0: no limit.
type function struct {
	op          op
	least, most int
}

var functions = map[string]function{
	"min": {opMin, 2, -1}, "max": {opMax, 2, -1},
	"abs": {opAbs, 1, 1}, "log": {opLog, 1, 1}, "exp": {opExp, 1, 1}, "sqrt": {opSqrt, 1, 1},
	"mean": {opMean, 1, 1},
}

// functionNames lists what may be called on a level.
var functionNames = [...][]string{
	overEvent: {"min", "max", "abs", "log", "exp", "sqrt", "field"},
	overUnit:  {"min", "max", "abs", "log", "exp", "sqrt"},
	overMeans: {"mean", "log", "exp", "sqrt"},
}

// alike are functions under the names they have elsewhere.
var alike = map[string]string{"avg": "mean", "average": "mean", "ln": "log", "pow": "**"}

func (c *checker) call(n *ast.CallNode) *node {
	callee, ok := n.Callee.(*ast.IdentifierNode)
	if !ok {
		_, bad := c.at(n, "only functions can be called")
		return bad
	}
	name := callee.Value
	if name == "field" && c.level == overEvent {
		return c.field(n)
	}
	fn, known := functions[name]
	switch {
	case known && c.level == overMeans && !slices.Contains(functionNames[c.level], name):
		return c.notSmooth(n, name)
	case name == "mean" && c.level == overUnit:
		_, bad := c.at(n, "mean() inside mean(): a score is of one unit, and has no mean over units")
		return bad
	case name == "mean" && c.level == overEvent:
		_, bad := c.at(n, "mean() is over units, and belongs in an estimate; here is one event")
		return bad
	case !known:
		e, bad := c.at(callee, "unknown function")
		allowed := functionNames[c.level]
		e.Allowed, e.Suggestion = strings.Join(allowed, ", "), Nearest(name, allowed)
		if a := alike[name]; slices.Contains(allowed, a) || a == "**" {
			e.Suggestion = a
		}
		c.faultsWithin(n.Arguments, e.Suggestion == "mean")
		return bad
	case len(n.Arguments) < fn.least || fn.most >= 0 && len(n.Arguments) > fn.most:
		_, bad := c.at(n, "%s takes %s, not %d", name, fn.takes(), len(n.Arguments))
		return bad
	case fn.op == opMean:
		return c.mean(n)
	}
	x := c.number(n.Arguments[0])
	if fn.op.takesOne() {
		return c.settle(n, &node{op: fn.op, typ: number, args: []*node{x}})
	}
	for _, a := range n.Arguments[1:] {
		x = c.settle(n, &node{op: fn.op, typ: number, args: []*node{x, c.number(a)}})
	}
	return x
}

// faultsWithin reports the faults of arguments whose function is at fault itself.
func (c *checker) faultsWithin(args []ast.Node, ofMean bool) {
	before := c.level
	if ofMean {
		c.level = overUnit
	}
	for _, a := range args {
		c.expr(a)
	}
	c.level = before
}

// takes names the arguments of a function in messages.
func (f function) takes() string {
	if f.most < 0 {
		return fmt.Sprintf("%d arguments or more", f.least)
	}
	return "one argument"
}

// field is field("odd name").
func (c *checker) field(n *ast.CallNode) *node {
	if len(n.Arguments) == 1 {
		if s, ok := n.Arguments[0].(*ast.StringNode); ok && s.Value != "" {
			return &node{op: opField, name: s.Value}
		}
	}
	e, bad := c.at(n, "field takes the name of a field, in quotes")
	e.Suggestion = `field("odd name")`
	return bad
}
