package expr

import (
	"math"
	"strings"

	"github.com/expr-lang/expr/ast"
	"pgregory.net/rapid"
)

// The oracles evaluate the parser's tree as it stands, by the words of the package
// comment: no checker, no folding, no closures, no shortcuts.

// treeOf parses what the package has accepted.
func treeOf(t rapid.TB, src string) (*source, ast.Node) {
	t.Helper()
	s, tree := parse(src)
	if tree == nil {
		t.Fatalf("%s: %v", src, s.faults)
	}
	return s, tree
}

// An outcome is a value of the event oracle: nil is absent, else a float64,
// string, bool, or one of the faults.
type outcome any

type faultOutcome Status

type other struct{}

// boolField is a bool that an event brings: a condition, and no number.
type boolField bool

func (o eventOracle) field(n ast.Node) outcome {
	v := o.fields[o.path(n)]
	if b, ok := v.(bool); ok {
		return boolField(b)
	}
	return v
}

type eventOracle struct {
	*source
	fields map[string]outcome
}

func (o eventOracle) eval(n ast.Node) outcome {
	switch n := n.(type) {
	case *ast.IntegerNode:
		return float64(n.Value)
	case *ast.FloatNode:
		return n.Value
	case *ast.StringNode:
		return n.Value
	case *ast.BoolNode:
		return n.Value
	case *ast.IdentifierNode, *ast.MemberNode:
		return o.field(n)
	case *ast.CallNode:
		if name := n.Callee.(*ast.IdentifierNode).Value; name != "field" {
			args := make([]outcome, len(n.Arguments))
			for i, a := range n.Arguments {
				args[i] = o.eval(a)
			}
			return calculate(name, args...)
		}
		return o.field(n)
	case *ast.UnaryNode:
		return o.unary(n)
	case *ast.BinaryNode:
		return o.binary(n)
	}
	panic("oracle: no such node")
}

func (o eventOracle) path(n ast.Node) string {
	switch n := n.(type) {
	case *ast.IdentifierNode:
		return n.Value
	case *ast.CallNode:
		return n.Arguments[0].(*ast.StringNode).Value
	case *ast.MemberNode:
		return o.path(n.Node) + "." + n.Property.(*ast.StringNode).Value
	}
	panic("oracle: no path")
}

func (o eventOracle) unary(n *ast.UnaryNode) outcome {
	if in, ok := n.Node.(*ast.BinaryNode); ok && in.Operator == "in" && in.Location() == n.Location() {
		all := outcome(true)
		for _, item := range in.Right.(*ast.ArrayNode).Nodes {
			all = kleeneAnd(all, compareOutcomes("!=", o.eval(in.Left), o.eval(item)))
		}
		return all
	}
	x := o.eval(n.Node)
	switch n.Operator {
	case "+":
		return x
	case "-":
		return calculate("neg", x)
	}
	return kleeneNot(truthOf(x))
}

func (o eventOracle) binary(n *ast.BinaryNode) outcome {
	l := o.eval(n.Left)
	if n.Operator == "in" {
		any := outcome(false)
		for _, item := range n.Right.(*ast.ArrayNode).Nodes {
			any = kleeneNot(kleeneAnd(kleeneNot(any), kleeneNot(compareOutcomes("==", l, o.eval(item)))))
		}
		return any
	}
	r := o.eval(n.Right)
	switch n.Operator {
	case "??":
		if l == nil {
			return r
		}
		return l
	case "&&", "and":
		return kleeneAnd(truthOf(l), truthOf(r))
	case "||", "or":
		return kleeneNot(kleeneAnd(kleeneNot(truthOf(l)), kleeneNot(truthOf(r))))
	case "==", "!=", "<", "<=", ">", ">=":
		return compareOutcomes(n.Operator, l, r)
	}
	return calculate(n.Operator, l, r)
}

// truthOf is nil, true or false.
func truthOf(x outcome) outcome {
	switch x := x.(type) {
	case nil:
		return nil
	case bool:
		return x
	case boolField:
		return bool(x)
	}
	return false
}

func kleeneNot(x outcome) outcome {
	if x == nil {
		return nil
	}
	return !x.(bool)
}

func kleeneAnd(x, y outcome) outcome {
	switch {
	case x == false || y == false:
		return false
	case x == nil || y == nil:
		return nil
	}
	return true
}

func compareOutcomes(op string, l, r outcome) outcome {
	if l == nil || r == nil {
		return nil
	}
	for _, x := range []*outcome{&l, &r} {
		if b, ok := (*x).(boolField); ok {
			*x = bool(b)
		}
	}
	switch a := l.(type) {
	case float64:
		if b, ok := r.(float64); ok {
			return map[string]bool{"==": a == b, "!=": a < b || a > b, "<": a < b, "<=": a <= b, ">": a > b, ">=": a >= b}[op]
		}
	case string:
		if b, ok := r.(string); ok {
			c := strings.Compare(a, b)
			return map[string]bool{"==": c == 0, "!=": c != 0, "<": c < 0, "<=": c <= 0, ">": c > 0, ">=": c >= 0}[op]
		}
	case bool:
		if b, ok := r.(bool); ok {
			return map[string]bool{"==": a == b, "!=": a != b}[op]
		}
	}
	return false
}

// calculate treats what is no number by the order of Status.
func calculate(op string, args ...outcome) outcome {
	nums, worst := make([]float64, len(args)), math.MaxInt
	for i, a := range args {
		v, s := quantityOfOutcome(a)
		nums[i] = v
		if s != Present {
			worst = min(worst, int(s))
		}
	}
	if worst != math.MaxInt {
		return outcomeOf(0, Status(worst))
	}
	v := plainMath(op, nums)
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return faultOutcome(NotFinite)
	}
	return v
}

func quantityOfOutcome(x outcome) (float64, Status) {
	switch x := x.(type) {
	case nil:
		return 0, Missing
	case faultOutcome:
		return 0, Status(x)
	case bool:
		if x {
			return 1, Present
		}
		return 0, Present
	case float64:
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return 0, NotFinite
		}
		return x, Present
	}
	return 0, WrongType
}

func outcomeOf(v float64, s Status) outcome {
	switch s {
	case Present:
		return v
	case Missing:
		return nil
	}
	return faultOutcome(s)
}

func plainMath(op string, x []float64) float64 {
	switch op {
	case "neg":
		return -x[0]
	case "+":
		return x[0] + x[1]
	case "-":
		return x[0] - x[1]
	case "*":
		return x[0] * x[1]
	case "/":
		return x[0] / x[1]
	case "**":
		return math.Pow(x[0], x[1])
	case "abs":
		return math.Abs(x[0])
	case "log":
		return math.Log(x[0])
	case "exp":
		return math.Exp(x[0])
	case "sqrt":
		return math.Sqrt(x[0])
	}
	best := x[0]
	for _, v := range x[1:] {
		if op == "min" && v < best || op == "max" && v > best {
			best = v
		}
	}
	return best
}

// scoreOracle evaluates a score; nil is absent.
type scoreOracle struct {
	*source
	tallies map[string]outcome
}

func (o scoreOracle) eval(n ast.Node) outcome {
	switch n := n.(type) {
	case *ast.IntegerNode:
		return float64(n.Value)
	case *ast.FloatNode:
		return n.Value
	case *ast.BoolNode:
		v, _ := quantityOfOutcome(n.Value)
		return v
	case *ast.IdentifierNode:
		return o.tallies[n.Value]
	case *ast.CallNode:
		args := make([]outcome, len(n.Arguments))
		for i, a := range n.Arguments {
			args[i] = o.eval(a)
		}
		return absentIfFault(calculate(n.Callee.(*ast.IdentifierNode).Value, args...))
	case *ast.UnaryNode:
		if in, ok := n.Node.(*ast.BinaryNode); ok && in.Operator == "in" && in.Location() == n.Location() {
			return numberOf(kleeneNot(o.within(in)))
		}
		switch x := o.eval(n.Node); n.Operator {
		case "+":
			return x
		case "-":
			return absentIfFault(calculate("neg", x))
		default:
			return numberOf(kleeneNot(nonZero(x)))
		}
	case *ast.BinaryNode:
		return o.binary(n)
	}
	panic("oracle: no such node")
}

func (o scoreOracle) within(n *ast.BinaryNode) outcome {
	l, found := o.eval(n.Left), outcome(false)
	for _, item := range n.Right.(*ast.ArrayNode).Nodes {
		found = kleeneNot(kleeneAnd(kleeneNot(found), kleeneNot(compareOutcomes("==", l, o.eval(item)))))
	}
	return found
}

func (o scoreOracle) binary(n *ast.BinaryNode) outcome {
	if n.Operator == "in" {
		return numberOf(o.within(n))
	}
	l, r := o.eval(n.Left), o.eval(n.Right)
	switch n.Operator {
	case "??":
		if l == nil {
			return r
		}
		return l
	case "&&", "and":
		return numberOf(kleeneAnd(nonZero(l), nonZero(r)))
	case "||", "or":
		return numberOf(kleeneNot(kleeneAnd(kleeneNot(nonZero(l)), kleeneNot(nonZero(r)))))
	case "==", "!=", "<", "<=", ">", ">=":
		return numberOf(compareOutcomes(n.Operator, l, r))
	}
	return absentIfFault(calculate(n.Operator, l, r))
}

func nonZero(x outcome) outcome {
	if x == nil {
		return nil
	}
	return x.(float64) != 0
}

func numberOf(truth outcome) outcome {
	if truth == nil {
		return nil
	}
	v, _ := quantityOfOutcome(truth)
	return v
}

func absentIfFault(x outcome) outcome {
	if _, ok := x.(faultOutcome); ok {
		return nil
	}
	return x
}
