package expr_test

import (
	"fmt"
	"math"

	"stillwell/online/expr"
)

func ExampleParseFilter() {
	var f expr.Fields
	filter, err := expr.ParseFilter(`type == "ticket" && ms > 800`, &f)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Println(f.Names())
	fmt.Println(filter.Match(expr.Record{{Kind: expr.Text, Text: []byte("ticket")}, {Kind: expr.Number, Num: 912}}))
	fmt.Println(filter.Match(expr.Record{{Kind: expr.Text, Text: []byte("ticket")}, {}}))
	// Output:
	// [type ms]
	// true
	// false
}

func ExampleParseEstimate() {
	tallies := []expr.Tally{{Name: "fare"}, {Name: "visits", NonNegative: true}}
	e, err := expr.ParseEstimate("mean(fare) / mean(visits)", tallies)
	if err != nil {
		fmt.Println(err)
		return
	}
	grad := make([]float64, 2)
	fmt.Println(e.Shape(), e.Gradient([]float64{6, 4}, grad), grad)
	fmt.Println(e.Influence())
	// Output:
	// ratio 1.5 [0.25 -0.375]
	// (fare - R visits) / mean(visits), where R = mean(fare) / mean(visits)
}

func ExampleParseEstimate_faults() {
	_, err := expr.ParseEstimate("mean(faer) / max(mean(visits), 1)", []expr.Tally{{Name: "fare"}, {Name: "visits"}})
	fmt.Println(err)
	// Output:
	// offset 5: `faer`: unknown tally; did you mean fare? (allowed: fare, visits)
	// offset 13: `max(mean(visits), 1)`: max outside mean() is not smooth: the estimate would have no derivative everywhere, and so no standard error; it may stand inside mean(), over the tallies of one unit
}

func ExampleScore_Eval() {
	e, err := expr.ParseEstimate("mean(slowest > 800)", []expr.Tally{{Name: "slowest", MayBeAbsent: true}})
	if err != nil {
		fmt.Println(err)
		return
	}
	s := e.Scores()[0]
	fmt.Println(s.Binary(), s.MayBeAbsent())
	fmt.Println(s.Eval([]float64{912}))
	_, present := s.Eval([]float64{math.NaN()})
	fmt.Println(present)
	// Output:
	// true true
	// 1 true
	// false
}
