package expr

import (
	"flag"
	"fmt"
	"math"
	"os"
	"testing"

	"pgregory.net/rapid"
)

// check is rapid.Check with a fixed seed, and with more draws where there is time.
func check(t *testing.T, property func(*rapid.T)) {
	t.Helper()
	draws := "300"
	if os.Getenv("STILLWELL_LONG") != "" {
		draws = "30000"
	}
	for name, value := range map[string]string{"rapid.seed": "20260301", "rapid.nofailfile": "true", "rapid.checks": draws} {
		if f := flag.Lookup(name); f.Value.String() == f.DefValue { // not given on the command line
			if err := f.Value.Set(value); err != nil {
				t.Fatal(err)
			}
		}
	}
	rapid.Check(t, property)
}

// A grower draws random expressions as source text.
type grower struct {
	t      *rapid.T
	fields []string // names that may stand as any type
	texts  bool     // the expression is over an event
}

func (g grower) pick(from ...string) string { return rapid.SampledFrom(from).Draw(g.t, "pick") }

func (g grower) number(depth int) string {
	if depth == 0 || rapid.IntRange(0, 4).Draw(g.t, "leaf") == 0 {
		return g.pick(append([]string{"0", "1", "2.5", "3", "0.5", "-1"}, g.fields...)...)
	}
	switch rapid.IntRange(0, 7).Draw(g.t, "number") {
	case 0:
		return "(" + g.number(depth-1) + " ?? " + g.atom(depth-1) + ")"
	case 1:
		return g.pick("abs", "log", "exp", "sqrt") + "(" + g.number(depth-1) + ")"
	case 2:
		return fmt.Sprintf("%s(%s, %s, %s)", g.pick("min", "max"), g.number(depth-1), g.number(depth-1), g.number(0))
	case 3:
		return "-" + g.atom(depth-1)
	case 4:
		return "(" + g.condition(depth-1) + ")"
	}
	l, r := g.atom(depth-1), g.atom(depth-1)
	if rapid.Bool().Draw(g.t, "bare") {
		l = g.pick(append(g.fields, "2")...) // lets precedence decide
	}
	return l + " " + g.pick("+", "-", "*", "/", "**") + " " + r
}

func (g grower) atom(depth int) string { return "(" + g.number(depth) + ")" }

func (g grower) condition(depth int) string {
	if depth == 0 || rapid.IntRange(0, 3).Draw(g.t, "leaf") == 0 {
		return g.comparison(0)
	}
	switch rapid.IntRange(0, 5).Draw(g.t, "condition") {
	case 0:
		return g.pick("!", "not ") + "(" + g.condition(depth-1) + ")"
	case 1:
		return "((" + g.condition(depth-1) + ") ?? (" + g.condition(depth-1) + "))"
	case 2:
		return g.comparison(depth - 1)
	}
	return g.condition(depth-1) + " " + g.pick("&&", "||", "and", "or") + " " + g.condition(depth-1)
}

func (g grower) comparison(depth int) string {
	cmp := g.pick("==", "!=", "<", "<=", ">", ">=")
	if !g.texts {
		if rapid.IntRange(0, 3).Draw(g.t, "in") == 0 {
			return g.atom(depth) + g.pick(" in ", " not in ") + "[1, 2.5, -1]"
		}
		return g.atom(depth) + " " + cmp + " " + g.atom(depth)
	}
	field := g.pick(g.fields...)
	switch rapid.IntRange(0, 8).Draw(g.t, "comparison") {
	case 0:
		return field + " " + cmp + " " + g.pick(`"a"`, `'b'`, `""`)
	case 1:
		return g.pick(`"a"`, `'b'`) + " " + cmp + " " + field
	case 2:
		return field + " " + cmp + " " + g.pick(g.fields...)
	case 3:
		return field + g.pick(" in ", " not in ") + g.pick(`["a", "c"]`, `[1, 3]`, `["1","2","3","4","5","6","7","8","b"]`)
	case 4:
		return field
	case 5:
		return g.pick("true", "false", field) + g.pick(" == ", " != ") + g.pick("true", "false")
	case 6:
		return "(" + field + " ?? 'a') " + cmp + " " + g.pick(append(g.fields, `"a"`)...)
	case 7:
		return field + " " + cmp + " " + g.pick("1", "-1", "2.5")
	}
	return g.atom(depth) + " " + cmp + " " + g.atom(depth)
}

var eventFields = []string{"amount", "ms", "class", "order.total", `field("odd name")`}

// drawEvent draws the fields as the oracle and as the package want them.
func drawEvent(t *rapid.T, f *Fields) (Record, map[string]outcome) {
	values := map[string]outcome{}
	rec := make(Record, len(f.Names()))
	for i, name := range f.Names() {
		var v Value
		var o outcome
		switch rapid.IntRange(0, 6).Draw(t, "kind") {
		case 0:
		case 1, 2, 3:
			x := rapid.SampledFrom([]float64{0, 1, -1, 2.5, 3, 1e300, -1e300, math.Inf(1), math.NaN()}).Draw(t, "num")
			v, o = Value{Kind: Number, Num: x}, x
		case 4:
			x := rapid.SampledFrom([]string{"", "a", "b", "c", "1"}).Draw(t, "text")
			v, o = Value{Kind: Text, Text: []byte(x)}, x
		case 5:
			x := rapid.Bool().Draw(t, "bool")
			v, o = Value{Kind: Bool, True: x}, x
		case 6:
			v, o = Value{Kind: Other}, other{}
		}
		rec[i], values[name] = v, o
	}
	return rec, values
}

func TestFilterAgainstOracle(t *testing.T) {
	accepted, matched := 0, map[bool]int{}
	check(t, func(t *rapid.T) {
		src := grower{t, eventFields, true}.condition(4)
		var f Fields
		filter, err := ParseFilter(src, &f)
		if err != nil {
			return // constant faults and comparisons that chain
		}
		accepted++
		for range 5 {
			rec, values := drawEvent(t, &f)
			s, tree := treeOf(t, src)
			want := truthOf(eventOracle{s, values}.eval(tree)) == true
			if got := filter.Match(rec); got != want {
				t.Fatalf("%s over %v: %v, want %v", src, values, got, want)
			}
			matched[want]++
		}
	})
	if accepted < 30 || matched[true] < 20 || matched[false] < 20 {
		t.Errorf("the draw is poor: %d accepted, matches %v", accepted, matched)
	}
}

func TestOperandAgainstOracle(t *testing.T) {
	accepted, statuses := 0, map[Status]int{}
	check(t, func(t *rapid.T) {
		src := grower{t, eventFields, true}.number(4)
		var f Fields
		operand, err := ParseValue(src, &f)
		if err != nil {
			return
		}
		accepted++
		for range 5 {
			rec, values := drawEvent(t, &f)
			s, tree := treeOf(t, src)
			want, wantStatus := quantityOfOutcome(eventOracle{s, values}.eval(tree))
			got, status := operand.Eval(rec)
			if got != want || status != wantStatus {
				t.Fatalf("%s over %v: %v %v, want %v %v", src, values, got, status, want, wantStatus)
			}
			statuses[status]++
		}
	})
	if accepted < 30 || len(statuses) < 4 {
		t.Errorf("the draw is poor: %d accepted, statuses %v", accepted, statuses)
	}
}

var scoreTallies = []Tally{
	{Name: "fare"}, {Name: "visits", NonNegative: true}, {Name: "bought", Binary: true},
	{Name: "slowest", MayBeAbsent: true}, {Name: "count", MayBeAbsent: true, NonNegative: true},
}

// drawUnit draws tallies that keep what the list promises of them.
func drawUnit(t *rapid.T) ([]float64, map[string]outcome) {
	row, values := make([]float64, len(scoreTallies)), map[string]outcome{}
	for i, y := range scoreTallies {
		row[i] = rapid.SampledFrom([]float64{0, 1, 2.5, 3, 7, -1, -2.5}).Draw(t, "tally")
		if y.NonNegative {
			row[i] = math.Abs(row[i])
		}
		if y.Binary {
			row[i] = oneIf(row[i] > 1)
		}
		if values[y.Name] = row[i]; y.MayBeAbsent && rapid.Bool().Draw(t, "absent") {
			row[i], values[y.Name] = math.NaN(), nil
		}
	}
	return row, values
}

func TestScoreAgainstOracle(t *testing.T) {
	names := make([]string, len(scoreTallies))
	for i, y := range scoreTallies {
		names[i] = y.Name
	}
	accepted, sure, bits, absent := 0, 0, 0, 0
	check(t, func(t *rapid.T) {
		g := grower{t, names, false}
		src := g.number(4)
		if rapid.Bool().Draw(t, "cond") {
			src = g.condition(3)
		}
		e, err := ParseEstimate("mean("+src+")", scoreTallies)
		if err != nil {
			return
		}
		accepted++
		score := e.Scores()[0]
		again, err := ParseEstimate("mean("+score.String()+")", scoreTallies)
		if err != nil || again.Scores()[0].String() != score.String() {
			t.Fatalf("%s prints as %s, which reads as %v, %v", src, score, again, err)
		}
		for range 5 {
			row, values := drawUnit(t)
			s, tree := treeOf(t, src)
			want := scoreOracle{s, values}.eval(tree)
			for _, score := range []*Score{score, again.Scores()[0]} {
				got, present := score.Eval(row)
				if present != (want != nil) || present && got != want {
					t.Fatalf("%s = %s over %v: %v %v, want %v", src, score, values, got, present, want)
				}
				if !present && !score.MayBeAbsent() {
					t.Fatalf("%s is sure to be present, and is not over %v", src, values)
				}
				if b := rangeOf(score.root, scoreTallies); present && !(b.lo <= got && got <= b.hi) && !(b.lo != b.lo || b.hi != b.hi) {
					t.Fatalf("%s over %v is %v, outside its range %v", src, values, got, b)
				}
				if present && score.Binary() && got != 0 && got != 1 {
					t.Fatalf("%s is said to be binary, and is %v over %v", src, got, values)
				}
			}
			absent += int(1 - oneIf(want != nil))
		}
		sure += int(1 - oneIf(score.MayBeAbsent()))
		bits += int(oneIf(score.Binary()))
	})
	if accepted < 30 || sure < 5 || bits < 5 || absent < 20 {
		t.Errorf("the draw is poor: %d accepted, %d sure, %d binary, %d absent", accepted, sure, bits, absent)
	}
}
