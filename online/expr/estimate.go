package expr

import (
	"slices"

	"github.com/expr-lang/expr/ast"
)

// An Estimate is a smooth functional of means of scores, theta = g(m): m holds
// the mean over units of each distinct score, in the order of Scores.
type Estimate struct {
	Functional
	num, den     Combination // the estimate is num / den, if both are given
	denominators []*Functional
}

// ParseEstimate compiles an estimate such as mean(fare) / mean(visits) over the
// tallies, which scores refer to by index. On faults it returns Errors.
func ParseEstimate(src string, tallies []Tally) (*Estimate, error) {
	s, tree := parse(src)
	c := &checker{source: s, level: overMeans, tallies: tallies}
	if tree == nil {
		return nil, c.faults.sorted()
	}
	x := c.expr(tree)
	if len(c.faults) == 0 && !x.has(opMean) {
		c.at(tree, "an estimate needs the mean of a score, as in mean(%s)", firstName(tallies))
	}
	if len(c.faults) > 0 {
		return nil, c.faults.sorted()
	}
	e := &Estimate{Functional: newFunctional(x, c.scores)}
	e.num, e.den = fractionOf(x, len(c.scores))
	if e.num.isMultipleOf(e.den) || !slices.ContainsFunc(e.grad, func(d *node) bool { return !d.isNum(0) }) {
		c.at(tree, "the estimate has the same value whatever the data")
		return nil, c.faults.sorted()
	}
	for _, d := range divisors(x) {
		f := newFunctional(d, c.scores)
		e.denominators = append(e.denominators, &f)
	}
	return e, nil
}

func firstName(tallies []Tally) string {
	if len(tallies) == 0 {
		return "a tally"
	}
	return tallies[0].Name
}

// mean checks mean(score), and gives equal scores one place.
func (c *checker) mean(n *ast.CallNode) *node {
	c.level = overUnit
	x := c.expr(n.Arguments[0])
	c.level = overMeans
	if x.typ == broken {
		return x
	}
	if !x.has(opTally) {
		_, bad := c.at(n, "the mean of a constant; a score depends on a tally")
		return bad
	}
	score := newScore(x, c.tallies)
	at := len(c.scores)
	for i, s := range c.scores {
		if s.key == score.key {
			at = i
		}
	}
	if at == len(c.scores) {
		c.scores = append(c.scores, score)
	}
	return &node{op: opMean, typ: number, slot: at}
}

// Scores are the distinct scores in order of first appearance; expressions that
// differ only in spacing, parentheses, the order of operands or the side from
// which they compare are one. The caller must not change them.
func (e *Estimate) Scores() []*Score { return e.scores }

// Denominators are what must stay away from zero for the estimate to be smooth:
// divisors, and arguments of logarithms, roots and powers that are no whole
// positive ones, as far as they contain means. They are functionals of the same
// means, each once, in order of appearance.
func (e *Estimate) Denominators() []*Functional { return e.denominators }

func divisors(root *node) []*node {
	var all []*node
	seen := map[string]bool{}
	add := func(n *node) {
		if key := canonical(n); n.has(opMean) && !seen[key] {
			seen[key] = true
			all = append(all, n)
		}
	}
	root.walk(func(n *node) {
		switch {
		case n.op == opDiv:
			add(n.args[1])
		case n.op == opLog || n.op == opSqrt:
			add(n.args[0])
		case n.op == opPow && !isWhole(n.args[1]):
			add(n.args[0])
		}
	})
	return all
}
