package boundary

import (
	"math"
	"testing"
)

func TestGateUnits(t *testing.T) {
	for _, tt := range []struct {
		name string
		gate Gate
		skew float64
		k    float64
		need float64
	}{
		// 50, 153 and about 450 are the factors that the simulations in sim_test.go bear out.
		{"five per cent", Gate{Error: 0.05}, 2, 50, 201},
		{"one per cent", Gate{Error: 0.01}, 1, 153, 154},
		{"one in a thousand", Gate{Error: 0.001}, 1, 451, 452},
		{"one-sided", Gate{Error: 0.01, OneSided: true}, 1, 306, 307},
		{"negative skewness", Gate{Error: 0.01}, -1, 153, 154},
		{"symmetric", Gate{Error: 0.01}, 0, 153, 100},
		{"mild", Gate{Error: 0.05}, 1, 50, 100},
		{"equal shares", Gate{Error: 0.001, EqualShares: true}, 4, 25, 400},
		{"equal shares, one-sided", Gate{Error: 0.01, OneSided: true, EqualShares: true}, 1, 306, 307},
	} {
		if got := tt.gate.K(); math.Abs(got-tt.k) > 0.5 {
			t.Errorf("%s: k = %.2f, want %.0f", tt.name, got, tt.k)
		}
		if got := tt.gate.Needed(tt.skew); got != tt.need {
			t.Errorf("%s: needed = %.0f, want %.0f", tt.name, got, tt.need)
		}
	}
}

func TestGateReasons(t *testing.T) {
	good := ArmEvidence{Name: "wide", Units: 1000, Skew: 1.7, Heaviest: 0.02}
	for _, tt := range []struct {
		name   string
		change func(*ArmEvidence)
		why    string
	}{
		{"passes", func(*ArmEvidence) {}, ""},
		{"just enough", func(a *ArmEvidence) { a.Units, a.Skew = 154, 1 }, ""},
		{"just too few", func(a *ArmEvidence) { a.Units, a.Skew = 153, 1 },
			"not yet: arm wide has 153 of the 154 units that its skewness (1) asks for"},
		{"skewed", func(a *ArmEvidence) { a.Units = 180 },
			"not yet: arm wide has 180 of the 443 units that its skewness (1.7) asks for"},
		{"few", func(a *ArmEvidence) { a.Units = 80 },
			"not yet: arm wide has 80 units, at least 100 are needed"},
		{"no arms", func(a *ArmEvidence) { a.Name, a.Units = "", 80 },
			"not yet: there are 80 units, at least 100 are needed"},
		{"few successes", func(a *ArmEvidence) { a.Binary, a.Successes, a.Failures, a.Skew = true, 24, 976, 6 },
			"not yet: arm wide has 24 successes and 976 failures, at least 25 of each are needed"},
		{"few failures", func(a *ArmEvidence) { a.Binary, a.Successes, a.Failures = true, 976, 24 },
			"not yet: arm wide has 976 successes and 24 failures, at least 25 of each are needed"},
		{"enough of both", func(a *ArmEvidence) { a.Binary, a.Successes, a.Failures = true, 975, 25 }, ""},
		{"all equal", func(a *ArmEvidence) { a.Skew = math.NaN() },
			"not yet: arm wide has 1000 units, but their influence values do not vary"},
		{"one heavy unit", func(a *ArmEvidence) { a.Heaviest = 0.0501 },
			"one unit of arm wide holds 5.0% of the sum of squared influence values, more than the 5% allowed: wait, or declare a cap on the score"},
		{"heaviest unknown", func(a *ArmEvidence) { a.Heaviest = math.NaN() },
			"one unit of arm wide holds NaN% of the sum of squared influence values, more than the 5% allowed: wait, or declare a cap on the score"},
	} {
		bad := good
		tt.change(&bad)
		if got := (Gate{Error: 0.01}).Check([]ArmEvidence{good, bad}); got != tt.why {
			t.Errorf("%s:\n got %q\nwant %q", tt.name, got, tt.why)
		}
	}
	if (Gate{Error: 0.01}).Check(nil) == "" {
		t.Error("passes without units")
	}
	if (Gate{Error: math.NaN()}).Check([]ArmEvidence{good}) == "" {
		t.Error("passes with an error that is not a number")
	}
}
