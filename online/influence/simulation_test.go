package influence_test

import (
	"math"
	"math/rand/v2"
	"os"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"

	"stillwell/online/influence"
)

// Two forms of the lift of a proportion: as a lift of means, tested where it is linear,
// and as a lift of ratios over a constant, tested by logarithms. What the gradient alone
// would say is the value over its standard error.
func lifts(x1, n1, x0, n0 int64) (linear, logarithm, gradient float64) {
	over := func(x, n int64) *influence.Arm {
		p, m := float64(x)/float64(n), float64(n)
		return &influence.Arm{Units: n, Freedom: m - 1, Mean: []float64{p, 1}, Cov: []float64{p * (1 - p) / (m - 1), 0, 0, 0}}
	}
	one, zero := over(x1, n1), over(x0, n0)
	e := influence.Relative(meanOf(0), one, zero)
	return e.Z(0), influence.Relative(ratioOf(0, 1), one, zero).Z(0), e.Value() / e.StdError()
}

// binomial lists the probabilities of 0 to top successes.
func binomial(n int64, p float64, top int) []float64 {
	out := make([]float64, top+1)
	out[0] = math.Pow(1-p, float64(n))
	for x := 1; x <= top; x++ {
		out[x] = out[x-1] * float64(n-int64(x)+1) / float64(x) * p / (1 - p)
	}
	return out
}

// Equal arms of 5,000 units with success probability 0.01, one look: errors of the lower
// and upper side, by summing over all outcomes, so without simulation error. By the
// gradient the lower side errs three times as often as allowed at 0.01, eight times at
// 0.001, and the upper side never. The expected values were computed apart from this
// program, by the same sum with scipy 1.17.1.
func TestLiftErrsToOneSideByItsGradient(t *testing.T) {
	const n, p, top = 5000, 0.01, 140
	prob := binomial(n, p, top)
	type errors struct{ lower, upper float64 }
	type result struct{ linear, logarithm, gradient errors }
	got := map[float64]*result{2.3263478740408408: {}, 3.090232306167813: {}} // nominal 0.01, 0.001
	for x1 := int64(25); x1 <= top; x1++ {
		for x0 := int64(25); x0 <= top; x0++ {
			weight := prob[x1] * prob[x0]
			linear, logarithm, gradient := lifts(x1, n, x0, n)
			for c, r := range got {
				count := func(e *errors, z float64) {
					if z < -c {
						e.lower += weight
					}
					if z > c {
						e.upper += weight
					}
				}
				count(&r.linear, linear)
				count(&r.logarithm, logarithm)
				count(&r.gradient, gradient)
			}
		}
	}
	for c, want := range map[float64]result{
		2.3263478740408408: {errors{.00976, .00976}, errors{.00915, .00915}, errors{.02793, .00051}},
		3.090232306167813:  {errors{.00093, .00093}, errors{.00076, .00076}, errors{.00757, .00000}},
	} {
		check := func(what string, got, want errors) {
			if math.Abs(got.lower-want.lower) > 1e-5 || math.Abs(got.upper-want.upper) > 1e-5 {
				t.Errorf("beyond %.3g, %s: lower %.5f, upper %.5f, want %.5f, %.5f", c, what, got.lower, got.upper, want.lower, want.upper)
			}
		}
		check("linear", got[c].linear, want.linear)
		check("logarithm", got[c].logarithm, want.logarithm)
		check("gradient", got[c].gradient, want.gradient)
	}
}

// The same under continuous looking: the one-sided delayed-start boundary at 0.01
// (Robbins, Siegmund 1970, Ann. Math. Stat. 41:1410), looked at every 500 units an arm
// from 10,000 to 110,000. The expected rates are our simulation with numpy 2.4.6, 120,000
// paths; the tolerance is 3.5 standard errors of the paths run here.
func TestLiftUnderContinuousLooking(t *testing.T) {
	paths := 2500
	if os.Getenv("STILLWELL_LONG") != "" {
		paths = 20000
	}
	const p, start, step, looks, a = 0.01, 10000, 500, 200, 3.136760661
	logPhi := func(x float64) float64 { return math.Log(0.5 * math.Erfc(-x/math.Sqrt2)) }
	beyond := func(z float64, n int) bool {
		return z > 0 && z*z+2*logPhi(z) >= a*a+2*logPhi(a)+math.Log(float64(n)/start)
	}
	rng := rand.New(rand.NewPCG(18, 7))
	first, later := newBinomial(start, p), newBinomial(step, p)
	var lower, upper [3]float64
	for range paths {
		var low, high [3]bool
		x1, x0 := first.draw(rng), first.draw(rng)
		for look := range looks {
			n := start + look*step
			linear, logarithm, gradient := lifts(x1, int64(n), x0, int64(n))
			for i, z := range [3]float64{linear, logarithm, gradient} {
				low[i] = low[i] || beyond(-z, n)
				high[i] = high[i] || beyond(z, n)
			}
			x1 += later.draw(rng)
			x0 += later.draw(rng)
		}
		for i := range low {
			if low[i] {
				lower[i] += 1 / float64(paths)
			}
			if high[i] {
				upper[i] += 1 / float64(paths)
			}
		}
	}
	t.Logf("%d paths: lower %.4f, upper %.4f (linear, logarithm, gradient)", paths, lower, upper)
	for i, want := range []struct{ lower, upper float64 }{{.0056, .0055}, {.0053, .0052}, {.0183, .0008}} {
		for _, side := range [2][2]float64{{lower[i], want.lower}, {upper[i], want.upper}} {
			if math.Abs(side[0]-side[1]) > 3.5*math.Sqrt(side[1]/float64(paths)) {
				t.Errorf("%s: error %.4f, want %.4f", []string{"linear", "logarithm", "gradient"}[i], side[0], side[1])
			}
		}
	}
}

// A binomialLaw draws by inversion of the cumulative probabilities.
type binomialLaw struct{ upTo []float64 }

func newBinomial(n int64, p float64) binomialLaw {
	top := int(float64(n)*p + 12*math.Sqrt(float64(n)*p) + 10)
	cdf := binomial(n, p, top)
	for x := 1; x <= top; x++ {
		cdf[x] += cdf[x-1]
	}
	return binomialLaw{cdf}
}

func (b binomialLaw) draw(rng *rand.Rand) int64 {
	u := rng.Float64() * b.upTo[len(b.upTo)-1]
	lo, hi := 0, len(b.upTo)-1
	for lo < hi {
		if mid := (lo + hi) / 2; b.upTo[mid] < u {
			lo = mid + 1
		} else {
			hi = mid
		}
	}
	return int64(lo)
}

// Differences of normal means of equal variance, one look at nominal 0.05. With 1.96 in
// place of t, 2 and 2 units miss .189 and 5 and 5 .0857 (R 4.2.2: 2*pt(-1.96, 2) and
// 2*pt(-1.96, 8)), 5 and 40 .102; with t at the degrees of Welch and Satterthwaite .0233,
// .0443, .0585 (the rest our simulation in R 4.2.2, 100,000 draws or more; slightly
// liberal where the small arm has most of the variance, as Welch's test is known to be).
func TestSmallSamplesNeedStudentAndWelch(t *testing.T) {
	const draws = 40000
	rng := rand.New(rand.NewPCG(8, 8))
	arm := func(n int) *influence.Arm {
		var sum, squares float64
		for range n {
			x := rng.NormFloat64()
			sum += x
			squares += x * x
		}
		m := float64(n)
		return &influence.Arm{Units: int64(n), Freedom: m - 1, Mean: []float64{sum / m}, Cov: []float64{(squares - sum*sum/m) / (m * (m - 1))}}
	}
	for _, tt := range []struct {
		n1, n0        int
		normal, welch float64
	}{
		{2, 2, .189, .0233}, // Interval refuses fewer than 5; the set at a t quantile does not
		{5, 5, .0857, .0443},
		{5, 40, .102, .0585},
	} {
		var normal, welch float64
		for range draws {
			e := influence.Difference(meanOf(0), arm(tt.n1), arm(tt.n0))
			if math.Abs(e.Z(0)) > 1.959963984540054 {
				normal += 1. / draws
			}
			lo, hi, why := e.Interval(0.95)
			if tt.n1 < 5 {
				if why == "" {
					t.Fatal("an interval from 2 units an arm")
				}
				lo, hi, _ = e.Set(distuv.StudentsT{Sigma: 1, Nu: e.Freedom()}.Quantile(0.975))
			}
			if lo > 0 || hi < 0 {
				welch += 1. / draws
			}
		}
		t.Logf("%d and %d units: normal misses %.4f, Welch %.4f", tt.n1, tt.n0, normal, welch)
		for _, rate := range [2][2]float64{{normal, tt.normal}, {welch, tt.welch}} {
			if math.Abs(rate[0]-rate[1]) > 3.5*math.Sqrt(rate[1]/draws) {
				t.Errorf("%d and %d units: misses %.4f, want %.4f", tt.n1, tt.n0, rate[0], rate[1])
			}
		}
	}
}
