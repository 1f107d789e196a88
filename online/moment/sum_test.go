package moment

import (
	"math"
	"math/big"
	"math/rand/v2"
	"testing"

	"pgregory.net/rapid"
)

// precise is wide enough to hold any sum, product or quotient here far beyond a Sum.
const precise = 2000

func exactly(x float64) *big.Float { return new(big.Float).SetPrec(precise).SetFloat64(x) }

func (s Sum) big() *big.Float { return exactly(s.Hi).Add(exactly(s.Hi), exactly(s.Lo)) }

// wide draws numbers over 120 binary orders of magnitude, zeros and whole ones among them.
func wide(t *rapid.T, label string) float64 {
	if rapid.IntRange(0, 9).Draw(t, label+" kind") == 0 {
		return float64(rapid.IntRange(-3, 3).Draw(t, label+" small"))
	}
	mantissa := rapid.Float64Range(1, 2).Draw(t, label+" mantissa")
	if rapid.Bool().Draw(t, label+" negative") {
		mantissa = -mantissa
	}
	return math.Ldexp(mantissa, rapid.IntRange(-60, 60).Draw(t, label+" exponent"))
}

func drawSum(t *rapid.T, label string) Sum {
	s := Sum{Hi: wide(t, label)}
	s.Add(s.Hi * math.Ldexp(rapid.Float64Range(-1, 1).Draw(t, label+" low"), -54))
	return s
}

// within fails unless |got - want| <= 2^-bits of the largest of scale.
func within(t interface{ Fatalf(string, ...any) }, what string, got Sum, want *big.Float, bits int, scale ...*big.Float) {
	top := new(big.Float).SetPrec(precise)
	for _, s := range append(scale, want) {
		if a := new(big.Float).SetPrec(precise).Abs(s); a.Cmp(top) > 0 {
			top = a
		}
	}
	bound := new(big.Float).SetPrec(precise).SetMantExp(top, -bits)
	off := new(big.Float).SetPrec(precise).Sub(got.big(), want)
	if off.Abs(off).Cmp(bound) > 0 {
		t.Fatalf("%s: got %v + %v, want %v, off by %v, allowed %v", what, got.Hi, got.Lo, want, off, bound)
	}
	if got.Hi+got.Lo != got.Hi {
		t.Fatalf("%s: %v + %v is not normalised", what, got.Hi, got.Lo)
	}
}

func TestSumOperationsAgainstExactArithmetic(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		s, o := drawSum(t, "s"), drawSum(t, "o")
		x, y := wide(t, "x"), wide(t, "y")
		op := func() *big.Float { return new(big.Float).SetPrec(precise) }
		xy := op().Mul(exactly(x), exactly(y))

		r := s
		r.Add(x)
		within(t, "add", r, op().Add(s.big(), exactly(x)), 104, s.big(), exactly(x))
		r = s
		r.AddProduct(x, y)
		within(t, "add product", r, op().Add(s.big(), xy), 104, s.big(), xy)
		r = s
		r.AddSum(o)
		within(t, "add sum", r, op().Add(s.big(), o.big()), 104, s.big(), o.big())
		r = s
		r.Sub(o)
		within(t, "sub", r, op().Sub(s.big(), o.big()), 104, s.big(), o.big())
		within(t, "times", s.times(o), op().Mul(s.big(), o.big()), 103)
		within(t, "difference", difference(x, y), op().Sub(exactly(x), exactly(y)), 1000)
		if y != 0 {
			within(t, "over", s.over(y), op().Quo(s.big(), exactly(y)), 103)
		}
	})
}

func TestSumIsTheNearestFloat(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		s := drawSum(t, "s")
		if want, _ := s.big().Float64(); s.Float() != want {
			t.Fatalf("%v + %v reads %v, nearest is %v", s.Hi, s.Lo, s.Float(), want)
		}
	})
}

// Eighths up to 2^40 and their products, thousands of them, fit in 104 bits: every
// order gives the same bits, and taking everything away gives zero.
func TestSumHasNoOrderOnAGrid(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 1))
	const terms = 4000
	xs, ys := make([]float64, terms), make([]float64, terms)
	for i := range xs {
		xs[i] = float64(rng.Int64N(1<<44)-1<<43) / 8
		ys[i] = float64(rng.Int64N(1<<44)-1<<43) / 8
	}
	total := func(order []int) (sum Sum) {
		for _, i := range order {
			sum.AddProduct(xs[i], ys[i])
			sum.Add(xs[i])
		}
		return sum
	}
	first := total(rng.Perm(terms))
	if first.Lo == 0 {
		t.Fatal("the sum fits a float64: the case is too easy")
	}
	for range 20 {
		if again := total(rng.Perm(terms)); again != first {
			t.Fatalf("another order gives %v, first %v", again, first)
		}
	}
	for _, i := range rng.Perm(terms) {
		first.AddProduct(-xs[i], ys[i])
		first.Add(-xs[i])
	}
	if (first != Sum{}) {
		t.Fatalf("after taking everything away: %v", first)
	}
}
