package expr

import (
	"math"
	"slices"
	"strings"
	"testing"
)

func parseEstimate(t *testing.T, src string) *Estimate {
	t.Helper()
	e, err := ParseEstimate(src, scoreTallies)
	if err != nil {
		t.Fatalf("%s: %v", src, err)
	}
	return e
}

func scoreTexts(e *Estimate) []string {
	var texts []string
	for _, s := range e.Scores() {
		texts = append(texts, s.String())
	}
	return texts
}

func TestScoresAreDistinct(t *testing.T) {
	for src, want := range map[string][]string{
		"mean(fare) / mean(visits)":                                     {"fare", "visits"},
		"mean(visits) * mean(fare) / mean( (visits) )":                  {"visits", "fare"},
		"mean(fare + visits) - mean(visits + fare) * 2":                 {"fare + visits"},
		"mean(fare > 3) / mean(3 < fare) ** 2":                          {"fare > 3"},
		"mean(fare >= 3) / mean(3 <= fare) ** 2":                        {"fare >= 3"},
		"mean(fare > 3) / mean(3 > fare)":                               {"fare > 3", "3 > fare"},
		"mean(fare == visits) / mean(visits == fare) ** 2":              {"fare == visits"},
		"mean(min(fare, visits, 400)) - 2 * mean(min(400,fare,visits))": {"min(fare, visits, 400)"},
		"mean(bought and fare > 1) + mean((fare>1)&&bought)":            {"bought && fare > 1"},
		"mean(fare * (2 + 3)) - 2 * mean(5 * fare)":                     {"fare * 5"},
		"mean(fare in [2, 1]) + mean(fare in [1.0, 2, 2])":              {"fare in [2, 1]"},
		"mean(fare in [2]) + mean(fare not in [2])":                     {"fare in [2]", "fare not in [2]"},
		"mean(fare - visits) + mean(visits - fare) ** 2":                {"fare - visits", "visits - fare"},
		"mean(fare ?? 1) + mean(1 ?? fare) ** 2":                        {"fare ?? 1", "1 ?? fare"},
		"mean(-fare) + mean(!(fare > 1)) + mean(abs(fare))":             {"-fare", "!(fare > 1)", "abs(fare)"},
		"mean(fare + (visits + 1)) + mean((fare + visits) + 1)":         {"fare + (visits + 1)", "fare + visits + 1"}, // sums do not associate exactly
		"mean(count / (visits * 2)) * mean(-(fare ** 2))":               {"count / (visits * 2)", "-fare ** 2"},
	} {
		if got := scoreTexts(parseEstimate(t, src)); !slices.Equal(got, want) {
			t.Errorf("%s has scores %q, want %q", src, got, want)
		}
	}
}

func TestScoreMeaning(t *testing.T) {
	none := math.NaN()
	// fare, visits, bought, slowest, count
	row := []float64{450, 3, 1, none, 0}
	for _, tt := range []struct {
		src     string
		want    float64 // NaN: absent
		maybe   bool    // may be absent
		binary  bool
		tallies []int
	}{
		{"fare", 450, false, false, []int{0}},
		{"min(fare, 400)", 400, false, false, []int{0}},
		{"slowest", none, true, false, []int{3}},
		{"slowest ?? 0", 0, false, false, []int{3}},
		{"slowest > 3", none, true, true, []int{3}},
		{"(slowest ?? 0) > 3", 0, false, true, []int{3}},
		{"slowest > 3 || fare > 3", 1, true, true, []int{0, 3}},
		{"slowest > 3 && fare < 3", 0, true, true, []int{0, 3}},
		{"slowest > 3 && fare > 3", none, true, true, []int{0, 3}},
		{"(slowest > 3) ?? bought", 1, false, true, []int{2, 3}},
		{"(slowest > 3) ?? fare", 450, false, false, []int{0, 3}},
		{"slowest in [1, 2]", none, true, true, []int{3}},
		{"visits in [1, 3]", 1, false, true, []int{1}},
		{"visits not in [1, 3]", 0, false, true, []int{1}},
		{"slowest ** 0", none, true, false, []int{3}}, // although NaN to the power of 0 is 1
		{"bought", 1, false, true, []int{2}},
		{"!bought", 0, false, true, []int{2}},
		{"1 - bought", 0, false, true, []int{2}},
		{"2 - bought", 1, false, false, []int{2}},
		{"bought * (fare > 3)", 1, false, true, []int{0, 2}},
		{"bought * fare", 450, false, false, []int{0, 2}},
		{"bought + bought", 2, false, false, []int{2}},
		{"max(bought, fare > 3, 0)", 1, false, true, []int{0, 2}},
		{"bought == true", 1, false, true, []int{2}},
		{"(fare > 3) == bought", 1, false, true, []int{0, 2}},
		{"fare / visits", 150, true, false, []int{0, 1}},
		{"fare / count", none, true, false, []int{0, 4}},
		{"(fare / count) ?? 0", 0, false, false, []int{0, 4}},
		{"fare / (visits + 1)", 112.5, false, false, []int{0, 1}},
		{"fare / max(visits, 1)", 150, false, false, []int{0, 1}},
		{"log(visits)", math.Log(3), true, false, []int{1}},
		{"log(visits + 1)", math.Log(4), false, false, []int{1}},
		{"log(count)", none, true, false, []int{4}},
		{"log(abs(fare) + 1)", math.Log(451), false, false, []int{0}},
		{"log(fare + 1)", math.Log(451), true, false, []int{0}},
		{"sqrt(visits)", math.Sqrt(3), false, false, []int{1}},
		{"sqrt(fare ** 2)", 450, false, false, []int{0}},
		{"sqrt(-visits)", none, true, false, []int{1}},
		{"exp(-visits)", math.Exp(-3), false, false, []int{1}},
		{"exp(fare)", math.Exp(450), true, false, []int{0}},
		{"exp(fare * 2)", none, true, false, []int{0}},
		{"exp(min(fare, 5))", math.Exp(5), false, false, []int{0}},
		{"fare ** 3", 91125000, false, false, []int{0}},
		{"fare ** -1", 1.0 / 450, true, false, []int{0}},
		{"(visits + 1) ** -1", 0.25, false, false, []int{1}},
		{"visits ** 0.5", math.Sqrt(3), false, false, []int{1}},
		{"fare ** 0.5", math.Sqrt(450), true, false, []int{0}},
		{"visits ** fare", math.Pow(3, 450), true, false, []int{0, 1}},
		{"-fare + 2 * visits", -444, false, false, []int{0, 1}},
	} {
		s := parseEstimate(t, "mean("+tt.src+")").Scores()[0]
		got, present := s.Eval(row)
		if present != !math.IsNaN(tt.want) || present && math.Abs(got-tt.want) > 1e-12*math.Abs(tt.want) {
			t.Errorf("%s = %v %v, want %v", tt.src, got, present, tt.want)
		}
		if s.MayBeAbsent() != tt.maybe || s.Binary() != tt.binary || !slices.Equal(s.Tallies(), tt.tallies) {
			t.Errorf("%s: may be absent %v, binary %v, tallies %v; want %v, %v, %v", tt.src,
				s.MayBeAbsent(), s.Binary(), s.Tallies(), tt.maybe, tt.binary, tt.tallies)
		}
	}
}

func TestShape(t *testing.T) {
	for _, tt := range []struct {
		src      string
		shape    Shape
		num, den Combination // of Fraction, den also of a constant; none if it is none
	}{
		{"mean(fare)", Mean, Combination{0, []float64{1}}, Combination{1, []float64{0}}},
		{"2 * mean(fare) / 2", Mean, Combination{0, []float64{1}}, Combination{1, []float64{0}}},
		{"-mean(fare)", Linear, Combination{0, []float64{-1}}, Combination{1, []float64{0}}},
		{"mean(fare) + 0 * mean(visits)", Mean, Combination{0, []float64{1, 0}}, Combination{1, []float64{0, 0}}},
		{"mean(fare) / mean(visits)", Ratio, Combination{0, []float64{1, 0}}, Combination{0, []float64{0, 1}}},
		{"3 * mean(fare) / (mean(visits) * 3)", Ratio, Combination{0, []float64{3, 0}}, Combination{0, []float64{0, 3}}},
		{"100 * mean(fare) / mean(visits)", Smooth, Combination{0, []float64{100, 0}}, Combination{0, []float64{0, 1}}},
		{"mean(fare) / mean(visits) - 1", Smooth, Combination{0, []float64{1, -1}}, Combination{0, []float64{0, 1}}},
		{"1 - mean(fare) / mean(visits)", Smooth, Combination{0, []float64{-1, 1}}, Combination{0, []float64{0, 1}}},
		{"(mean(fare) - mean(count)) / (mean(visits) + 2)", Smooth, Combination{0, []float64{1, -1, 0}}, Combination{2, []float64{0, 0, 1}}},
		{"mean(fare) / mean(visits) + mean(count) / mean(visits)", Smooth, Combination{0, []float64{1, 0, 1}}, Combination{0, []float64{0, 1, 0}}},
		{"2 / mean(visits)", Smooth, Combination{2, []float64{0}}, Combination{0, []float64{1}}},
		{"2 / (4 / mean(visits))", Linear, Combination{0, []float64{0.5}}, Combination{1, []float64{0}}},
		{"mean(fare) - 2 * mean(visits) + 3", Linear, Combination{3, []float64{1, -2}}, Combination{1, []float64{0, 0}}},
		{"mean(fare) * mean(visits)", Smooth, Combination{}, Combination{}},
		{"mean(fare) / mean(visits) / mean(count)", Smooth, Combination{}, Combination{}},
		{"mean(fare) / mean(visits) + mean(fare) / mean(count)", Smooth, Combination{}, Combination{}},
		{"log(mean(fare))", Smooth, Combination{}, Combination{}},
		{"mean(fare) / (mean(visits) - mean(visits))", Smooth, Combination{}, Combination{}},
	} {
		e := parseEstimate(t, tt.src)
		num, den, _ := e.Fraction()
		if e.Shape() != tt.shape || !sameCombination(num, tt.num) || !sameCombination(den, tt.den) {
			t.Errorf("%s is %v, %v / %v; want %v, %v / %v", tt.src, e.Shape(), num, den, tt.shape, tt.num, tt.den)
		}
		if m := []float64{3, 4, 5}[:len(e.Scores())]; num.Coef != nil && math.Abs(num.At(m)/den.At(m)-e.Eval(m)) > 1e-12 {
			t.Errorf("%s = %v, but as a fraction %v", tt.src, e.Eval(m), num.At(m)/den.At(m))
		}
		if _, ok := e.Linear(); ok != (tt.shape == Linear || tt.shape == Mean) {
			t.Errorf("%s is linear: %v", tt.src, ok)
		}
	}
	if i, j, ok := parseEstimate(t, "mean(visits) / mean(fare)").Ratio(); i != 0 || j != 1 || !ok {
		t.Errorf("ratio of scores %d and %d, %v", i, j, ok)
	}
	if i, ok := parseEstimate(t, "0 * mean(visits) + mean(fare)").Mean(); i != 1 || !ok {
		t.Errorf("mean of score %d, %v", i, ok)
	}
}

func sameCombination(a, b Combination) bool {
	return a.Const == b.Const && slices.Equal(a.Coef, b.Coef)
}

func TestDenominators(t *testing.T) {
	for src, want := range map[string]string{
		"mean(fare)": "",
		"mean(fare) / mean(visits) + 1 / mean(visits)":                                            "mean(visits)",
		"mean(fare) / 2 + mean(fare) ** 2 + mean(visits) ** 0":                                    "",
		"log(mean(fare)) + log(3)":                                                                "mean(fare)",
		"sqrt(mean(fare) - 1) / exp(mean(visits))":                                                "exp(mean(visits)), mean(fare) - 1",
		"mean(fare) ** -2 + mean(visits) ** 0.5 + mean(count) ** mean(count) + 2 ** mean(bought)": "mean(fare), mean(visits), mean(count)",
		"mean(fare) / (mean(visits) / mean(count))":                                               "mean(visits) / mean(count), mean(count)",
	} {
		var got []string
		for _, d := range parseEstimate(t, src).Denominators() {
			got = append(got, d.String())
		}
		if s := strings.Join(got, ", "); s != want {
			t.Errorf("%s has denominators %s, want %s", src, s, want)
		}
	}
	e := parseEstimate(t, "mean(fare) / (mean(visits) - 2 * mean(fare))")
	dst := make([]float64, 2)
	if v := e.Denominators()[0].Gradient([]float64{3, 10}, dst); v != 4 || !slices.Equal(dst, []float64{-2, 1}) {
		t.Errorf("the divisor is %v with gradient %v, want 4 and [-2 1]", v, dst)
	}
}

func TestInfluence(t *testing.T) {
	for src, want := range map[string]string{
		"mean(fare)":                               "fare - mean(fare)",
		"mean(fare)/mean(visits)":                  "(fare - R visits) / mean(visits), where R = mean(fare) / mean(visits)",
		"mean(min(fare,400)) / mean(visits+1)":     "(min(fare, 400) - R (visits + 1)) / mean(visits + 1), where R = mean(min(fare, 400)) / mean(visits + 1)",
		"mean(fare > 3) / mean(bought)":            "((fare > 3) - R bought) / mean(bought), where R = mean(fare > 3) / mean(bought)",
		"mean(fare) - 2 * mean(visits)":            "fare - mean(fare) - 2 * (visits - mean(visits))",
		"-mean(fare)":                              "-(fare - mean(fare))",
		"log(mean(fare)) - 2 * mean(slowest ?? 0)": "(fare - mean(fare)) / mean(fare) - 2 * ((slowest ?? 0) - mean(slowest ?? 0))",
		"mean(fare) * mean(visits)":                "mean(visits) * (fare - mean(fare)) + mean(fare) * (visits - mean(visits))",
		"mean(fare) ** 2":                          "2 * mean(fare) * (fare - mean(fare))",
		"sqrt(mean(fare))":                         "(fare - mean(fare)) / (2 * sqrt(mean(fare)))",
		"100 * mean(fare) / mean(visits)":          "100 * (fare - mean(fare)) / mean(visits) - 100 * mean(fare) * (visits - mean(visits)) / mean(visits) / mean(visits)",
		"mean(slowest)": "slowest - mean(slowest); " +
			"the deviation of (slowest) counts 0 for units without it, and is divided by the share of units with it",
		"mean(fare) / mean(slowest)": "(fare - mean(fare)) / mean(slowest) - mean(fare) * (slowest - mean(slowest)) / mean(slowest) / mean(slowest); " +
			"the deviation of (slowest) counts 0 for units without it, and is divided by the share of units with it",
	} {
		if got := parseEstimate(t, src).Influence(); got != want {
			t.Errorf("%s has the influence function\n%s, want\n%s", src, got, want)
		}
	}
}
