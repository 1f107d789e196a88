package boundary

import (
	"math"
	"math/rand/v2"
	"os"
	"testing"
)

// Simulated errors. Each test runs a short version; STILLWELL_LONG=1 runs as many
// paths as the reference figures beside it were computed from (go test -v prints the
// table). Those are realised errors of simulations in R 4.2.2 and numpy 1.24.2 that share
// no code with this package, of 4,000 paths unless stated.

// size is the short or the long number of paths.
func size(short, full int) int {
	if os.Getenv("STILLWELL_LONG") == "1" {
		return full
	}
	return short
}

// A rate is a share of paths that erred.
type rate struct{ hits, paths int }

func (r rate) value() float64 { return float64(r.hits) / float64(r.paths) }

// se is the Monte Carlo standard error if the true rate were p.
func (r rate) se(p float64) float64 { return math.Sqrt(p * (1 - p) / float64(r.paths)) }

// requireNear fails where the rate is further from a reference, itself known
// from so many paths, than four standard errors of the difference.
func requireNear(t *testing.T, what string, got rate, reference float64, paths int) {
	t.Helper()
	t.Logf("%-60s %.4f   reference %.4f", what, got.value(), reference)
	tol := 4*math.Sqrt(reference*(1-reference)*(1/float64(got.paths)+1/float64(paths))) + 0.0005 // printed digits
	if math.Abs(got.value()-reference) > tol {
		t.Errorf("%s: error %.4f, reference %.4f, tolerance %.4f", what, got.value(), reference, tol)
	}
}

// requireWithin fails where the rate exceeds the limit by more than three standard errors.
func requireWithin(t *testing.T, what string, got rate, limit float64) {
	t.Helper()
	t.Logf("%-60s %.4f   at most   %.4f", what, got.value(), limit)
	if got.value() > limit+3*got.se(limit) {
		t.Errorf("%s: error %.4f, want at most %.4f", what, got.value(), limit)
	}
}

// requireBeyond fails where the rate does not exceed the limit by four standard errors:
// the rule under test would then not be needed, and its test could not fail.
func requireBeyond(t *testing.T, what string, got rate, limit float64) {
	t.Helper()
	t.Logf("%-60s %.4f   beyond    %.4f", what, got.value(), limit)
	if got.value() < limit+4*got.se(limit) {
		t.Errorf("%s: error %.4f, expected well beyond %.4f", what, got.value(), limit)
	}
}

// laws with mean 0.
var (
	normalLaw = func(r *rand.Rand) float64 { return r.NormFloat64() }
	expLaw    = func(r *rand.Rand) float64 { return r.ExpFloat64() - 1 }
	lognormal = func(r *rand.Rand) float64 { return math.Exp(r.NormFloat64()) - math.Sqrt(math.E) }
	pareto25  = func(r *rand.Rand) float64 { return math.Exp(r.ExpFloat64()/2.5) - 5.0/3 }
	bernoulli = func(p float64) func(r *rand.Rand) float64 {
		return func(r *rand.Rand) float64 {
			if r.Float64() < p {
				return 1 - p
			}
			return -p
		}
	}
)

// One mean, estimated variance, a look after every unit from the start to 20,000,
// alpha .05, the mixture tuned for 1,000; no gate, which is why skewed laws err from early starts.
func TestErrorOfBoundaries(t *testing.T) {
	const horizon, alpha = 20_000, 0.05
	starts := []int{10, 100, 1000}
	var mixture NormalMixture
	s := mixture.Tuning(alpha)
	mix := make([]float64, horizon+1)
	delayed := make([][]float64, len(starts))
	for i := range delayed {
		delayed[i] = make([]float64, horizon+1)
	}
	for n := 10; n <= horizon; n++ {
		mix[n] = sq(mixture.Critical(alpha, s*float64(n)/1000))
		for i, m := range starts {
			if n >= m {
				delayed[i][n] = sq(DelayedStart{}.Critical(alpha, float64(n)/float64(m)))
			}
		}
	}
	for _, tt := range []struct {
		name             string
		law              func(*rand.Rand) float64
		delayed, mixture [3]float64 // reference, by start
	}{
		{"normal", normalLaw, [3]float64{.080, .050, .038}, [3]float64{.042, .041, .028}},
		{"exponential", expLaw, [3]float64{.182, .062, .046}, [3]float64{.063, .053, .031}},
		{"bernoulli .01", bernoulli(.01), [3]float64{.90, .41, .090}, [3]float64{.91, .42, .077}},
	} {
		rng := rand.New(rand.NewPCG(1, 1))
		var byDelayed, byMixture [3]rate
		for range size(600, 4000) {
			var sum, squares float64
			var hitD, hitM [3]bool
			for n := 1; n <= horizon; n++ {
				x := tt.law(rng)
				sum += x
				squares += x * x
				if n < starts[0] {
					continue
				}
				ms := squares - sum*sum/float64(n)
				z2 := sum * sum / ms // variance divided by n
				if !(ms > 1e-9) {
					z2 = math.Inf(1) // all equal and not at the mean: the estimate is sure, and wrong
				}
				for i, m := range starts {
					if n >= m {
						hitD[i] = hitD[i] || z2 >= delayed[i][n]
						hitM[i] = hitM[i] || z2 >= mix[n]
					}
				}
			}
			for i := range starts {
				byDelayed[i].count(hitD[i])
				byMixture[i].count(hitM[i])
			}
		}
		for i, m := range starts {
			at := map[int]string{10: " from 10", 100: " from 100", 1000: " from 1000"}[m]
			requireNear(t, tt.name+", delayed start"+at, byDelayed[i], tt.delayed[i], 4000)
			requireNear(t, tt.name+", mixture"+at, byMixture[i], tt.mixture[i], 4000)
		}
	}
}

func sq(x float64) float64 { return x * x }

func (r *rate) count(hit bool) {
	r.paths++
	if hit {
		r.hits++
	}
}

// Brownian motion itself, looked at densely from m to 10,000 m: the exact boundaries
// spend nearly all their error, and not more. What they spend beyond the end, and
// between looks, is the rest.
func TestErrorOnBrownianMotion(t *testing.T) {
	const step, alpha = 1.004, 0.05
	n := int(math.Log(1e4)/math.Log(step)) + 1
	type boundary struct {
		name     string
		oneSided bool
		critical []float64
		errs     rate
		least    float64 // of alpha, that is spent
	}
	boundaries := []*boundary{
		{name: "delayed start, two-sided", least: 0.75},
		{name: "delayed start, one-sided", oneSided: true, least: 0.75},
		{name: "mixture from 1/300 of its tuned time, two-sided", least: 0.7},
		{name: "mixture from 1/300 of its tuned time, one-sided", oneSided: true, least: 0.7},
	}
	for i, b := range boundaries {
		for k := range n {
			ratio := math.Pow(step, float64(k))
			if i < 2 {
				b.critical = append(b.critical, DelayedStart{b.oneSided}.Critical(alpha, ratio))
			} else {
				m := NormalMixture{b.oneSided}
				b.critical = append(b.critical, m.Critical(alpha, m.Tuning(alpha)*ratio/300))
			}
		}
	}
	rng := rand.New(rand.NewPCG(2, 2))
	keep, fresh := math.Sqrt(1/step), math.Sqrt(1-1/step) // of z from look to look
	for range size(6000, 100_000) {
		z := rng.NormFloat64()
		var hit [4]bool
		for k := range n {
			for i, b := range boundaries {
				if z >= b.critical[k] || !b.oneSided && z <= -b.critical[k] {
					hit[i] = true
				}
			}
			z = keep*z + fresh*rng.NormFloat64()
		}
		for i, b := range boundaries {
			b.errs.count(hit[i])
		}
	}
	for _, b := range boundaries {
		requireWithin(t, b.name, b.errs, alpha)
		if v := b.errs.value(); v < b.least*alpha-3*b.errs.se(alpha) {
			t.Errorf("%s: error %.4f: the boundary is looser than it claims", b.name, v)
		}
	}
}

// Two arms of a known variance, an arm's share moved from 1% to 50% at the start m. With
// looks every m/50 units to 20 m the error is about .068 by the units alone, and .026
// by the clock; with looks as dense as they can be, to 1,000 m, the clock is needed all the more.
func TestErrorOfTheClock(t *testing.T) {
	const m, alpha = 1e3, 0.05
	var even, dense []float64 // units since the start, over m
	for after := 0.0; after <= 19; after += 0.02 {
		even = append(even, after)
	}
	for after := 0.0; after <= 999; after = math.Max(1e-4, after*1.02) {
		dense = append(dense, after)
	}
	paths := size(6000, 40_000)
	units, clock, _ := moveShares(t, m, alpha, even, paths)
	requireNear(t, "shares moved, delayed start by units alone", units, .068, 4000)
	requireNear(t, "shares moved, delayed start by the clock", clock, .026, 4000)
	units, clock, mixture := moveShares(t, m, alpha, dense, paths)
	requireBeyond(t, "looks all the time, delayed start by units alone", units, alpha)
	requireWithin(t, "looks all the time, delayed start by the clock", clock, alpha)
	requireWithin(t, "looks all the time, mixture by the clock", mixture, alpha)
}

// moveShares runs paths of two arms whose shares move at m, and returns how many err
// by a delayed start on the units alone, by one on the clock, and by the mixture.
func moveShares(t *testing.T, m, alpha float64, afters []float64, paths int) (byUnits, byClock, byMixture rate) {
	type look struct{ n1, n0, se, byUnits, byClock, byMixture float64 }
	var looks []look
	clocked := start(t, Config{Error: alpha, Method: Delayed})
	mixed := start(t, Config{Error: alpha, TuneFor: 20 * m})
	for _, after := range afters {
		l := look{n1: m * (0.01 + after/2), n0: m * (0.99 + after/2)}
		l.se = math.Sqrt(1/l.n1 + 1/l.n0)
		l.byUnits = DelayedStart{}.Critical(alpha, 1+after)
		at := Look{Units: m * (1 + after), StdError: l.se, Started: true}
		l.byClock = clocked.Step(at).Critical
		l.byMixture = mixed.Step(at).Critical
		looks = append(looks, l)
	}
	rng := rand.New(rand.NewPCG(3, 3))
	for range paths {
		var s1, s0, n1, n0 float64
		var hit [3]bool
		for _, l := range looks {
			s1 += rng.NormFloat64() * math.Sqrt(l.n1-n1)
			s0 += rng.NormFloat64() * math.Sqrt(l.n0-n0)
			n1, n0 = l.n1, l.n0
			z := math.Abs(s1/n1-s0/n0) / l.se
			hit[0] = hit[0] || z >= l.byUnits
			hit[1] = hit[1] || z >= l.byClock
			hit[2] = hit[2] || z >= l.byMixture
		}
		byUnits.count(hit[0])
		byClock.count(hit[1])
		byMixture.count(hit[2])
	}
	return byUnits, byClock, byMixture
}
