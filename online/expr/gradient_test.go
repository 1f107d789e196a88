package expr

import (
	"fmt"
	"math"
	"testing"

	"github.com/expr-lang/expr/ast"
	"pgregory.net/rapid"
)

// A dual is a value with its derivative: forward-mode differentiation over the
// parser's tree, against which the symbolic gradient is held.
type dual struct{ v, d float64 }

type dualOracle struct {
	m  map[string]float64
	by string // the tally by whose mean it differentiates
}

func (o dualOracle) eval(n ast.Node) dual {
	switch n := n.(type) {
	case *ast.IntegerNode:
		return dual{float64(n.Value), 0}
	case *ast.FloatNode:
		return dual{n.Value, 0}
	case *ast.UnaryNode:
		x := o.eval(n.Node)
		return dual{-x.v, -x.d}
	case *ast.CallNode:
		name := n.Callee.(*ast.IdentifierNode).Value
		if name == "mean" {
			tally := n.Arguments[0].(*ast.IdentifierNode).Value
			return dual{o.m[tally], oneIf(tally == o.by)}
		}
		x := o.eval(n.Arguments[0])
		switch name {
		case "log":
			return dual{math.Log(x.v), x.d / x.v}
		case "exp":
			return dual{math.Exp(x.v), math.Exp(x.v) * x.d}
		case "sqrt":
			return dual{math.Sqrt(x.v), x.d / 2 / math.Sqrt(x.v)}
		}
	case *ast.BinaryNode:
		x, y := o.eval(n.Left), o.eval(n.Right)
		switch n.Operator {
		case "+":
			return dual{x.v + y.v, x.d + y.d}
		case "-":
			return dual{x.v - y.v, x.d - y.d}
		case "*":
			return dual{x.v * y.v, x.d*y.v + x.v*y.d}
		case "/":
			return dual{x.v / y.v, (x.d*y.v - x.v*y.d) / (y.v * y.v)}
		case "**":
			p := dual{v: math.Pow(x.v, y.v)}
			if x.d != 0 {
				p.d += y.v * math.Pow(x.v, y.v-1) * x.d
			}
			if y.d != 0 {
				p.d += p.v * math.Log(x.v) * y.d
			}
			return p
		}
	}
	panic(fmt.Sprintf("oracle: no such node: %v", n))
}

// formula draws a smooth formula of means.
func formula(t *rapid.T, depth int) string {
	pick := func(from ...string) string { return rapid.SampledFrom(from).Draw(t, "pick") }
	if depth == 0 || rapid.IntRange(0, 4).Draw(t, "leaf") == 0 {
		return pick("mean(fare)", "mean(visits)", "mean(count)", "2", "0.5", "mean(fare)")
	}
	switch rapid.IntRange(0, 5).Draw(t, "formula") {
	case 0:
		return pick("log", "exp", "sqrt") + "(" + formula(t, depth-1) + ")"
	case 1:
		return "-(" + formula(t, depth-1) + ")"
	case 2:
		return "(" + formula(t, depth-1) + ") ** " + pick("2", "3", "0", "1", "-1", "0.5", "mean(visits)")
	}
	return "(" + formula(t, depth-1) + ") " + pick("+", "-", "*", "/") + " (" + formula(t, depth-1) + ")"
}

func TestGradientAgainstOracles(t *testing.T) {
	accepted, compared, differences := 0, 0, 0
	check(t, func(t *rapid.T) {
		src := formula(t, 4)
		e, err := ParseEstimate(src, scoreTallies)
		if err != nil {
			return // constants without finite value, estimates without mean
		}
		accepted++
		_, tree := treeOf(t, src)
		m, named := make([]float64, len(e.Scores())), map[string]float64{}
		for i, s := range e.Scores() {
			m[i] = rapid.Float64Range(0.5, 3).Draw(t, "mean")
			named[s.String()] = m[i]
		}
		grad := make([]float64, len(m))
		value := e.Gradient(m, grad)
		if value != e.Eval(m) && value == value {
			t.Fatalf("%s: Gradient returns %v, Eval %v", src, value, e.Eval(m))
		}
		if again, err := ParseEstimate(e.String(), scoreTallies); err != nil || again.String() != e.String() {
			t.Fatalf("%s prints as %s, which reads as %v, %v", src, e, again, err)
		}
		for i, s := range e.Scores() {
			want := dualOracle{named, s.String()}.eval(tree)
			if value != want.v && (value == value || want.v == want.v) {
				t.Fatalf("%s at %v = %v, want %v", src, named, value, want.v)
			}
			if !finite(want.v) || !finite(want.d) || math.Abs(want.d) > 1e12 {
				continue
			}
			compared++
			if scale := 1 + math.Abs(want.v) + math.Abs(want.d); math.Abs(grad[i]-want.d) > 1e-9*scale*scale {
				t.Fatalf("%s at %v by %s: %v, want %v", src, named, s, grad[i], want.d)
			}
			differences += centralDifference(t, e, m, i, grad[i])
		}
	})
	least := 50
	if testing.Short() {
		least = 10 // of a fifth of the draws
	}
	if accepted < 2*least || compared < least || differences < least {
		t.Errorf("the draw is poor: %d accepted, %d compared, %d by differences", accepted, compared, differences)
	}
}

// centralDifference compares a derivative with a difference quotient where that
// is accurate: where halving its step does not move it.
func centralDifference(t *rapid.T, e *Estimate, m []float64, i int, got float64) int {
	quotient := func(h float64) float64 {
		at := append([]float64(nil), m...)
		at[i] = m[i] + h
		up := e.Eval(at)
		at[i] = m[i] - h
		return (up - e.Eval(at)) / (2 * h)
	}
	wide, narrow := quotient(2e-5), quotient(1e-5)
	scale := math.Max(1, math.Abs(narrow))
	if !(math.Abs(wide-narrow) < 1e-6*scale) {
		return 0
	}
	if math.Abs(got-narrow) > 1e-5*scale {
		t.Fatalf("%s at %v by score %d: %v, difference quotient %v", e, m, i, got, narrow)
	}
	return 1
}

func TestGradientClosedForms(t *testing.T) {
	m := []float64{3, 7}
	for src, want := range map[string][]float64{ // derivatives by mean(fare), mean(visits)
		"mean(fare) / mean(visits)":           {1.0 / 7, -3.0 / 49},
		"mean(fare) / mean(visits) - 1":       {1.0 / 7, -3.0 / 49}, // relative lift (1/m0, -m1/m0^2)
		"log(mean(fare) / mean(visits))":      {1.0 / 3, -1.0 / 7},
		"mean(fare) - mean(visits)":           {1, -1},
		"mean(fare) ** mean(visits)":          {7 * math.Pow(3, 6), math.Pow(3, 7) * math.Log(3)},
		"sqrt(mean(fare) * mean(visits))":     {7 / (2 * math.Sqrt(21)), 3 / (2 * math.Sqrt(21))},
		"exp(mean(fare)) * 2 ** mean(visits)": {math.Exp(3) * 128, math.Exp(3) * 128 * math.Ln2},
	} {
		e, got := parseEstimate(t, src), make([]float64, 2)
		e.Gradient(m, got)
		for i := range got {
			if math.Abs(got[i]-want[i]) > 1e-14*math.Abs(want[i]) {
				t.Errorf("%s: derivative %d is %v, want %v", src, i, got[i], want[i])
			}
		}
	}
}
