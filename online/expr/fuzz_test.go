package expr

import (
	"errors"
	"math"
	"strings"
	"testing"
)

// FuzzParse reads any text in all three uses. Nothing panics; every fault lies in
// the text; what is accepted evaluates as the oracles do, and an estimate reads
// again from what it prints.
func FuzzParse(f *testing.F) {
	for _, tt := range faultTests {
		f.Add(tt.src)
	}
	for _, src := range []string{
		`type == "ticket" && ms > 800`, `(a ?? b) not in [1, -2.5] || !member`, `amount * 2 / field("odd name").x`,
		"mean(fare) / mean(visits)", "log(mean(min(fare, 400))) - 2 * mean(slowest ?? 0) ** 0.5", "mean(bought && fare in [1, 2])",
	} {
		f.Add(src)
	}
	f.Fuzz(func(t *testing.T, src string) {
		fuzzEvent(t, src)
		fuzzEstimate(t, src)
	})
}

// palette is given to fields in turn.
var palette = []struct {
	value   Value
	outcome outcome
}{
	{Value{}, nil},
	{Value{Kind: Number, Num: 3}, 3.0},
	{Value{Kind: Text, Text: []byte("ticket")}, "ticket"},
	{Value{Kind: Bool, True: true}, true},
	{Value{Kind: Other}, other{}},
	{Value{Kind: Number, Num: math.Inf(-1)}, math.Inf(-1)},
}

func fuzzEvent(t *testing.T, src string) {
	var f Fields
	filter, err := ParseFilter(src, &f)
	checkFaults(t, src, err, &f)
	var g Fields
	operand, err := ParseValue(src, &g)
	checkFaults(t, src, err, &g)
	if operand == nil {
		return
	}
	s, tree := treeOf(t, src)
	for turn := range palette {
		rec, values := make(Record, len(g.Names())), map[string]outcome{}
		for i, name := range g.Names() {
			p := palette[(i+turn)%len(palette)]
			rec[i], values[name] = p.value, p.outcome
		}
		want := eventOracle{s, values}.eval(tree)
		if filter != nil && filter.Match(rec) != (truthOf(want) == true) {
			t.Fatalf("filter %s over %v: %v", src, values, filter.Match(rec))
		}
		v, status := operand.Eval(rec)
		if wantV, wantStatus := quantityOfOutcome(want); v != wantV || status != wantStatus {
			t.Fatalf("operand %s over %v: %v %v, want %v %v", src, values, v, status, wantV, wantStatus)
		}
	}
}

func fuzzEstimate(t *testing.T, src string) {
	e, err := ParseEstimate(src, scoreTallies)
	checkFaults(t, src, err, &Fields{})
	if e == nil {
		return
	}
	for _, score := range e.Scores() {
		s, tree := treeOf(t, score.String())
		for _, row := range [][]float64{{1, 2, 1, math.NaN(), 0}, {-2.5, 0, 0, 1, math.NaN()}} {
			values := map[string]outcome{}
			for i, y := range scoreTallies {
				if row[i] == row[i] {
					values[y.Name] = row[i]
				}
			}
			want := scoreOracle{s, values}.eval(tree)
			if v, present := score.Eval(row); present != (want != nil) || present && v != want {
				t.Fatalf("score %s over %v: %v %v, want %v", score, values, v, present, want)
			}
		}
	}
	m, grad := make([]float64, len(e.Scores())), make([]float64, len(e.Scores()))
	for i := range m {
		m[i] = 1.5 + float64(i)
	}
	value := e.Gradient(m, grad)
	for _, d := range e.Denominators() {
		d.Gradient(m, grad)
	}
	if len(src) < 1000 && e.Influence() == "" {
		t.Fatalf("%s has no influence function", src)
	}
	again, err := ParseEstimate(e.String(), scoreTallies)
	if len(e.String()) > maxSource {
		return
	}
	if err != nil || again.String() != e.String() {
		t.Fatalf("%s prints as %s, which reads as %v, %v", src, e, again, err)
	}
	if v := again.Eval(m); v != value && (v == v || value == value) {
		t.Fatalf("%s is %v, printed as %s %v", src, value, e, v)
	}
}

func checkFaults(t *testing.T, src string, err error, f *Fields) {
	var es Errors
	if errors.As(err, &es) != (err != nil) || err != nil && (len(es) == 0 || len(f.Names()) > 0) {
		t.Fatalf("%q: %v with fields %v", src, err, f.Names())
	}
	last := 0
	for _, e := range es {
		if e.Offset < last || e.Length < 0 || e.Offset+e.Length > len(src) || src[e.Offset:e.Offset+e.Length] != e.Text || e.Message == "" {
			t.Fatalf("%q: fault %+v", src, e)
		}
		last = e.Offset
	}
}

// TestDepth reads the deepest texts there can be.
func TestDepth(t *testing.T) {
	for _, piece := range []string{"(", "-", "!", "not ", "a+", "a**", "a??", "a&&", "a.", "a==", "min(a,", "((a>0)+1>", "f(", "[", "a in [", "mean(a)*", "mean("} {
		src := strings.Repeat(piece, maxSource/len(piece))
		end := strings.Repeat(")", strings.Count(src, "("))
		for _, src := range []string{src, src + "a", strings.Repeat(piece, maxSource/len(piece)/2-2) + "a" + end[len(end)/2:]} {
			for _, use := range []string{"filter", "value", "estimate"} {
				_ = parseUse(use, src)
			}
		}
	}
}
