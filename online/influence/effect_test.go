package influence_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"stillwell/online/influence"
	"stillwell/online/moment"
)

// randomRows are correlated, skewed scores with means near 6.
func randomRows(rng *rand.Rand, n, k int, lift float64) [][]float64 {
	rows := make([][]float64, n)
	for i := range rows {
		common := rng.NormFloat64()
		for range k {
			rows[i] = append(rows[i], 5+lift+2*common+rng.ExpFloat64())
		}
	}
	return rows
}

var kinds = map[string]func(e influence.Estimate, one, zero *influence.Arm) *influence.Effect{
	"single":     func(e influence.Estimate, one, _ *influence.Arm) *influence.Effect { return influence.Single(e, one) },
	"difference": influence.Difference,
	"relative":   influence.Relative,
}

// Set is the inversion of Z: its ends are rejected just so, what lies within is not,
// what lies without is.
func TestSetHoldsWhatIsNotRejected(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 1))
	linearPart := smooth{
		func(m []float64) float64 { return 2*m[0] - m[1] + 3 },
		func(m, dst []float64) { clear(dst); dst[0], dst[1] = 2, -1 },
	}
	product := smooth{
		func(m []float64) float64 { return m[0] * m[1] },
		func(m, dst []float64) { clear(dst); dst[0], dst[1] = m[1], m[0] },
	}
	estimates := map[string]influence.Estimate{
		"mean":   meanOf(0),
		"ratio":  ratioOf(0, 1),
		"linear": {Of: linearPart, Shape: influence.Shape{Kind: influence.Linear}},
		"smooth": {Of: product, Shape: influence.Shape{Kind: influence.Smooth}},
	}
	sets := 0
	for range 200 {
		one := randomRows(rng, 80+rng.IntN(40), 3, 1)
		zero := randomRows(rng, 80+rng.IntN(40), 3, 0)
		plain := []*influence.Arm{armOf(t, "one", one), armOf(t, "zero", zero)}
		arms := adjusted(t, 2, one, zero)
		for name, estimate := range estimates {
			for contrast, compare := range kinds {
				for _, pair := range [][2]*influence.Arm{{plain[0], plain[1]}, {&arms[0], &arms[1]}} {
					e := compare(estimate, pair[0], pair[1])
					c := 0.5 + 2.5*rng.Float64()
					lo, hi, why := e.Set(c)
					if why != "" {
						t.Fatalf("%s %s at %g: %s", contrast, name, c, why)
					}
					sets++
					if !(lo < e.Value() && e.Value() < hi) {
						t.Fatalf("%s %s: %g outside (%g, %g)", contrast, name, e.Value(), lo, hi)
					}
					near(t, contrast+" "+name+" at the lower end", e.Z(lo), c, 1e-9)
					near(t, contrast+" "+name+" at the upper end", e.Z(hi), -c, 1e-9)
					width := hi - lo
					for _, theta := range []float64{lo + width/3, hi - 1e-3*width} {
						if math.Abs(e.Z(theta)) > c {
							t.Fatalf("%s %s: %g within the set is rejected", contrast, name, theta)
						}
					}
					for _, theta := range []float64{lo - width, lo - 1e-3*width, hi + 1e-3*width, hi + 10*width, -1e9, 1e9} {
						if z := e.Z(theta); math.Abs(z) <= c || (z > 0) != (theta < lo) {
							t.Fatalf("%s %s: %g outside (%g, %g) has z %g, c %g", contrast, name, theta, lo, hi, z, c)
						}
					}
				}
			}
		}
	}
	if sets != 200*4*3*2 {
		t.Errorf("%d sets", sets)
	}
}

// The sum of squares of all units' influence values is the variance, whatever the
// effect, with covariates and a third arm or without.
func TestInfluenceValuesMakeTheVariance(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 2))
	for range 100 {
		arms := [][][]float64{
			randomRows(rng, 8+rng.IntN(40), 4, 1), randomRows(rng, 8+rng.IntN(40), 4, 0), randomRows(rng, 1+rng.IntN(30), 4, 3),
		}
		for covariates := range 3 {
			k := 4 - covariates
			fits := adjusted(t, k, arms...)
			for contrast, compare := range kinds {
				e := compare(ratioOf(0, 1), &fits[0], &fits[1])
				var sum, byCell float64
				for role, rows := range arms {
					curve := e.Curve(influence.Role(role))
					for _, z := range rows {
						psi := curve.At(z)
						sum += psi * psi
					}
					if covariates > 0 || role < 2 {
						byCell += curve.SumOfSquares(cellOf(t, rows), upTo(len(curve.Weight)))
					}
				}
				v := e.StdError() * e.StdError()
				near(t, contrast+": sum over units", sum, v, 1e-9)
				near(t, contrast+": sum by moments", byCell, v, 1e-9)
			}
		}
	}
}

// Skewness by contraction is that of the values themselves.
func TestSkewness(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	arms := [][][]float64{randomRows(rng, 60, 4, 1), randomRows(rng, 90, 4, 0)}
	fits := adjusted(t, 2, arms...)
	e := influence.Relative(ratioOf(0, 1), &fits[0], &fits[1])
	for role, rows := range arms {
		curve := e.Curve(influence.Role(role))
		var mean, square, cube float64
		for _, z := range rows {
			mean += curve.At(z) / float64(len(rows))
		}
		for _, z := range rows {
			d := curve.At(z) - mean
			square += d * d / float64(len(rows))
			cube += d * d * d / float64(len(rows))
		}
		near(t, "skewness", curve.Skewness(cellOf(t, rows), upTo(4)), cube/math.Pow(square, 1.5), 1e-9)
	}
	same := [][]float64{{1, 2}, {1, 2}, {1, 2}}
	curve := influence.Single(ratioOf(0, 1), armOf(t, "", same)).Curve(influence.One)
	if s := curve.Skewness(cellOf(t, same), upTo(2)); !math.IsNaN(s) {
		t.Errorf("skewness of equal units: %g", s)
	}
}

// The sign of Z says which side the estimate lies on also where denominators are
// negative.
func TestNegativeDenominators(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 4))
	rows := randomRows(rng, 50, 2, 0)
	mirrored := make([][]float64, len(rows))
	for i, z := range rows {
		mirrored[i] = []float64{-z[0], -z[1]}
	}
	plain, negative := influence.Single(ratioOf(0, 1), armOf(t, "", rows)), influence.Single(ratioOf(0, 1), armOf(t, "", mirrored))
	near(t, "value", negative.Value(), plain.Value(), 1e-15)
	near(t, "z", negative.Z(0.5), plain.Z(0.5), 1e-12)
	lo, hi, _ := plain.Set(2)
	gotLo, gotHi, why := negative.Set(2)
	if why != "" {
		t.Fatal(why)
	}
	near(t, "low", gotLo, lo, 1e-12)
	near(t, "high", gotHi, hi, 1e-12)
}

// A lift of ratios with a part that is not positive has no logarithm; by its gradient
// it needs every denominator ten standard errors from zero.
func TestFarFromZero(t *testing.T) {
	arm := func(mean0, mean1, sd float64) *influence.Arm {
		return &influence.Arm{Name: "wide", Units: 100, Freedom: 99, Mean: []float64{mean0, mean1}, Cov: []float64{sd * sd, 0, 0, sd * sd}}
	}
	for _, tt := range []struct {
		what      string
		e         *influence.Effect
		wantInWhy string
	}{
		{"difference of ratios, both denominators far", influence.Difference(ratioOf(0, 1), arm(5, 1, 0.09), arm(5, 1, 0.09)), ""},
		{"difference of ratios, one near", influence.Difference(ratioOf(0, 1), arm(5, 1, 0.09), arm(5, 1, 0.11)), "9.09 standard errors"},
		{"lift of negative ratios, far", influence.Relative(ratioOf(0, 1), arm(-5, 1, 0.09), arm(-5, 1, 0.09)), ""},
		{"lift over a ratio near zero", influence.Relative(ratioOf(0, 1), arm(-5, 1, 0.09), arm(-0.1, 1, 0.09)), "compare with"},
		{"smooth with a divisor near zero", influence.Single(influence.Estimate{
			Of: quotient{0, 1}, Shape: influence.Shape{Kind: influence.Smooth}, Divisors: []influence.Functional{score(1)},
		}, arm(5, 1, 0.2)), "5 standard errors"},
		{"smooth with a divisor far from it", influence.Single(influence.Estimate{
			Of: quotient{0, 1}, Shape: influence.Shape{Kind: influence.Smooth}, Divisors: []influence.Functional{score(1)},
		}, arm(5, 1, 0.01)), ""},
	} {
		if why := tt.e.Why(); (why == "") != (tt.wantInWhy == "") || !strings.Contains(why, tt.wantInWhy) {
			t.Errorf("%s: why %q, want %q in it", tt.what, why, tt.wantInWhy)
		}
		if z := tt.e.Z(0); math.IsNaN(z) != (tt.wantInWhy != "") {
			t.Errorf("%s: z = %g", tt.what, z)
		}
		if lo, _, why := tt.e.Set(2); (why == "") != (tt.wantInWhy == "") || math.IsNaN(lo) != (tt.wantInWhy != "") {
			t.Errorf("%s: set from %g, %q", tt.what, lo, why)
		}
	}
}

func TestUnboundedSets(t *testing.T) {
	arm := func(mean, sd float64) *influence.Arm {
		return &influence.Arm{Units: 100, Freedom: 99, Mean: []float64{mean, 1}, Cov: []float64{sd * sd, 0, 0, 1e-6}}
	}
	lift := influence.Relative(meanOf(0), arm(1, 0.3), arm(1, 0.3))
	if _, _, why := lift.Set(3.3); why != "" {
		t.Errorf("bounded at 3.3: %s", why)
	}
	if lo, _, why := lift.Set(3.4); !strings.Contains(why, "unbounded") || !math.IsNaN(lo) {
		t.Errorf("unbounded at 3.4: %q from %g", why, lo)
	}
	// On the logarithmic scale no end would be infinite, and honest it would not be.
	ratios := influence.Relative(ratioOf(0, 1), arm(1, 0.3), arm(1, 0.3))
	if _, _, why := ratios.Set(3.3); why != "" {
		t.Errorf("bounded at 3.3: %s", why)
	}
	if _, _, why := ratios.Set(3.4); !strings.Contains(why, "unbounded") {
		t.Errorf("unbounded at 3.4: %q", why)
	}
	// Each of the three denominators of a lift of ratios counts.
	near := &influence.Arm{Units: 100, Freedom: 99, Mean: []float64{1, 1}, Cov: []float64{1e-6, 0, 0, 0.09}}
	for _, e := range []*influence.Effect{
		influence.Relative(ratioOf(0, 1), near, arm(1, 1e-3)), influence.Relative(ratioOf(0, 1), arm(1, 1e-3), near),
	} {
		if _, _, why := e.Set(3.4); !strings.Contains(why, "unbounded") {
			t.Errorf("a denominator 3.33 standard errors from zero, at 3.4: %q", why)
		}
	}
	if _, _, why := influence.Relative(ratioOf(0, 1), arm(1, 0.3), arm(1, 1e-3)).Set(3.4); why != "" {
		t.Errorf("the numerator of the arm may be near zero: %s", why)
	}
	if z := ratios.Z(-1); !math.IsInf(z, 1) {
		t.Errorf("a positive ratio against a lift of -1: z = %g", z)
	}
}

// At one value of theta the scores' combination may not vary at all. That value is then
// rejected by any measure, unless it is the estimate.
func TestNullWithoutVariance(t *testing.T) {
	rng := rand.New(rand.NewPCG(9, 9))
	for range 100 {
		rows := make([][]float64, 30)
		for i := range rows {
			w := 1 + rng.ExpFloat64()
			rows[i] = []float64{5 + 0.3*w, w}
		}
		if z := influence.Single(ratioOf(0, 1), armOf(t, "", rows)).Z(0.3); !math.IsInf(z, 1) {
			t.Fatalf("z = %g", z)
		}
	}
}

func TestNoInformationNoInterval(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 5))
	rows := randomRows(rng, 6, 2, 0)
	equal := make([][]float64, 1000)
	for i := range equal {
		equal[i] = []float64{0.1, 0.7}
	}
	adjustedProportions := adjusted(t, 1, [][]float64{{0, 1}, {1, 2}, {0, 3}, {0, 5}, {1, 4}, {0, 2}}, [][]float64{{0, 1}, {1, 2}, {0, 3}, {0, 5}, {1, 4}, {1, 9}})
	for _, tt := range []struct {
		what string
		e    *influence.Effect
		why  string
	}{
		{"four units", influence.Single(meanOf(0), armOf(t, "wide", rows[:4])), "4 units in arm wide, and an interval needs 5"},
		{"five units", influence.Single(meanOf(0), armOf(t, "wide", rows[:5])), ""},
		{"four in the other arm", influence.Difference(meanOf(0), armOf(t, "wide", rows), armOf(t, "old", rows[:4])), "in arm old"},
		{"no units", influence.Difference(meanOf(0), armOf(t, "wide", rows), &influence.Arm{Name: "old", Mean: []float64{math.NaN(), math.NaN()}, Cov: make([]float64, 4), Freedom: -1}), "0 units in arm old"},
		{"one unit has no variance", influence.Single(meanOf(0), &influence.Arm{Name: "old", Units: 1, Mean: []float64{1}, Cov: []float64{math.NaN()}}), "1 units in arm old"},
		{"all equal", influence.Single(meanOf(0), armOf(t, "", equal)), "no information"},
		{"a ratio of equal scores", influence.Single(ratioOf(0, 1), armOf(t, "", equal)), "no information"},
		{"a denominator of zero", influence.Single(ratioOf(0, 1), armOf(t, "", [][]float64{{1, 1}, {2, -1}, {3, 1}, {4, -1}, {3, 1}, {4, -1}})), "denominator is zero"},
		{"an arm that could not be adjusted", influence.Single(meanOf(0), &influence.Arm{Units: 10, Freedom: 8, Mean: []float64{1}, Cov: []float64{1}, Why: "the covariates do not vary"}), "do not vary"},
		{"adjusted, few outcomes", influence.Difference(proportionOf(0), &adjustedProportions[0], &adjustedProportions[1]), "too few for an adjusted interval"},
	} {
		lo, hi, why := tt.e.Interval(0.95)
		if tt.why == "" {
			if why != "" || !(lo < hi) {
				t.Errorf("%s: (%g, %g), why %q", tt.what, lo, hi, why)
			}
			continue
		}
		if !strings.Contains(why, tt.why) || !math.IsNaN(lo) || !math.IsNaN(hi) {
			t.Errorf("%s: (%g, %g), why %q, want %q in it", tt.what, lo, hi, why, tt.why)
		}
	}
	// Scores in proportion leave a ratio nothing to vary by, but for rounding.
	for range 100 {
		factor, rows := rng.ExpFloat64(), make([][]float64, 50)
		for i := range rows {
			w := math.Round(100 * rng.ExpFloat64())
			rows[i] = []float64{factor * w, w}
		}
		if e := influence.Single(ratioOf(0, 1), armOf(t, "", rows)); !strings.Contains(e.Why(), "no information") {
			t.Fatalf("ratio of scores in proportion: %g with error %g, why %q", e.Value(), e.StdError(), e.Why())
		}
	}
	for _, level := range []float64{0, 1, -1, math.NaN()} {
		if _, _, why := influence.Single(meanOf(0), armOf(t, "", rows)).Interval(level); !strings.Contains(why, "level") {
			t.Errorf("level %g: %q", level, why)
		}
	}
}

// Below 25 successes or failures in an arm, 0/1 scores have the score interval; at 25
// and beyond, the one by their variance.
func TestProportions(t *testing.T) {
	published := func(what string, e *influence.Effect, wantLo, wantHi, tolerance float64) {
		t.Helper()
		lo, hi, why := e.Interval(0.95)
		if why != "" || !(math.Abs(lo-wantLo) <= tolerance && math.Abs(hi-wantHi) <= tolerance) {
			t.Errorf("%s: (%.6f, %.6f) %s, want (%g, %g)", what, lo, hi, why, wantLo, wantHi)
		}
	}
	published("Newcombe 1998, Stat. Med. 17:857, table I: 0/20",
		influence.Single(proportionOf(0), proportionArm("", 0, 20)), 0, 0.1611, 5e-5)
	published("Newcombe 1998, Stat. Med. 17:873, table II: 56/70 - 48/80",
		influence.Difference(proportionOf(0), proportionArm("", 56, 70), proportionArm("", 48, 80)), 0.0528, 0.3382, 5e-5)
	published("the same as a ratio less 1, from its definition (score.py)",
		influence.Relative(proportionOf(0), proportionArm("", 56, 70), proportionArm("", 48, 80)), 0.0790471195344265, 0.6721453590897677, 1e-12)

	lo, hi, why := influence.Difference(proportionOf(0), proportionArm("", 0, 50), proportionArm("", 0, 50)).Interval(0.95)
	if why != "" || !(lo < 0 && hi > 0) {
		t.Errorf("no successes at all: (%g, %g) %s", lo, hi, why)
	}
	if _, _, why := influence.Relative(proportionOf(0), proportionArm("", 3, 50), proportionArm("old", 0, 50)).Interval(0.95); why != "unbounded: no successes in arm old" {
		t.Errorf("lift over nothing: %q", why)
	}
	for _, tt := range []struct {
		x, n  int64
		score bool
	}{{24, 100, true}, {25, 100, false}, {75, 100, false}, {76, 100, true}} {
		e := influence.Single(proportionOf(0), proportionArm("", tt.x, tt.n))
		lo, hi, _ := e.Interval(0.95)
		symmetric := math.Abs((lo+hi)/2-e.Value()) < 1e-12
		if symmetric == tt.score {
			t.Errorf("%d of %d: (%g, %g)", tt.x, tt.n, lo, hi)
		}
	}
}

// Freedom of one arm is n - 1; of two with equal parts twice that.
func TestFreedom(t *testing.T) {
	a, b := proportionArm("", 30, 100), proportionArm("", 70, 100)
	near(t, "one arm", influence.Single(meanOf(0), a).Freedom(), 99, 1e-12)
	near(t, "two equal arms", influence.Difference(meanOf(0), a, b).Freedom(), 198, 1e-12)
}

// The lift of fare per visit. R 4.2.2 with survey 4.1-1 gives the same, by svyratio in
// each arm and the difference of their logarithms.
func ExampleRelative() {
	shape, _ := moment.NewShape(2, [][2]int{{0, 0}, {0, 1}, {1, 1}}, nil)
	arm := func(name string, passengers ...[]float64) *influence.Arm {
		c := moment.NewCell(shape)
		for _, z := range passengers {
			c.Add(z) // fare, visits
		}
		a := influence.NewArm(name, c, []int{0, 1})
		return &a
	}
	wide := arm("wide", []float64{30, 2}, []float64{0, 1}, []float64{65, 3}, []float64{12, 1}, []float64{48, 2}, []float64{90, 4})
	current := arm("current", []float64{20, 2}, []float64{35, 3}, []float64{0, 1}, []float64{44, 4}, []float64{15, 1}, []float64{51, 5})
	farePerVisit := influence.Estimate{Of: quotient{0, 1}, Shape: influence.Shape{Kind: influence.Ratio, Num: 0, Den: 1}}
	e := influence.Relative(farePerVisit, wide, current)
	lo, hi, _ := e.Interval(0.95)
	fmt.Printf("%+.4f, standard error %.4f, 95%% from %+.4f to %+.4f\n", e.Value(), e.StdError(), lo, hi)
	// Output: +0.8275, standard error 0.2819, 95% from +0.2844 to +1.6002
}

// An effect with its interval, as every cell needs one at every step, within 5 us.
//
//	go test ./online/influence -run '^$' -bench Effect -count 5
func BenchmarkEffect(b *testing.B) {
	rng := rand.New(rand.NewPCG(6, 6))
	one, zero := cellOf(b, randomRows(rng, 900, 2, 1)), cellOf(b, randomRows(rng, 1100, 2, 0))
	for contrast, compare := range kinds {
		b.Run("contrast="+contrast, func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				a1, a0 := influence.NewArm("", one, []int{0, 1}), influence.NewArm("", zero, []int{0, 1})
				e := compare(ratioOf(0, 1), &a1, &a0)
				e.Interval(0.95)
				e.Set(3)
			}
		})
	}
	b.Run("skewness", func(b *testing.B) {
		a1, a0 := influence.NewArm("", one, []int{0, 1}), influence.NewArm("", zero, []int{0, 1})
		e := influence.Difference(ratioOf(0, 1), &a1, &a0)
		for b.Loop() {
			e.Curve(influence.One).Skewness(one, []int{0, 1})
		}
	})
}
