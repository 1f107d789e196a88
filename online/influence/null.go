package influence

import (
	"fmt"
	"math"
	"slices"
)

// far is how many standard errors every divisor must be from zero where an interval
// rests on the gradient alone. Common practice asks for 4, which leaves a relative
// lift at one-sided nominal 0.025 with an error of 0.109 (our simulation).
const far = 10

// How a value theta is tested as a null.
type method uint8

const (
	symmetric method = iota // value - theta over the standard error
	fieller                 // p - t q, linear in the means, over its own standard error at t
	logarithm               // the difference of logarithms
)

// null holds what the tests of all values theta have in common.
//
//	source  Fieller 1954, JRSS B 16:175, for linear numerator and denominator; the
//	        logarithm by the delta method
type null struct {
	method        method
	p, q          float64 // fieller: value = p/q - offset
	vpp, vpq, vqq float64 // and the covariance matrix of p and q
	offset        float64
	log, logSE    float64 // logarithm: of one over zero
	nearest       float64 // logarithm: the least distance of a divisor from zero, in standard errors
	why           string
}

func (e *Effect) newNull() null {
	s := e.estimate.Shape
	straight := s.Kind == Mean || s.Kind == Linear
	switch {
	case straight && e.contrast != relative:
		return null{method: symmetric}
	case straight:
		one := linear{One: slices.Clone(e.grad[One])}
		zero := linear{Zero: slices.Clone(e.grad[Zero])}
		return e.fieller(e.at[One], e.at[Zero], one, zero, 1)
	case s.Kind == Ratio && e.contrast == single:
		return e.fieller(e.arms[One].Mean[s.Num], e.arms[One].Mean[s.Den], e.mean(One, s.Num), e.mean(One, s.Den), 0)
	case s.Kind == Ratio && e.contrast == relative && e.positive():
		return e.logarithm()
	}
	return null{method: symmetric, why: e.nearDivisor()}
}

// mean is one arm's mean of score i as a linear functional.
func (e *Effect) mean(role Role, i int) (f linear) {
	f[role] = make([]float64, len(e.arms[role].Mean))
	f[role][i] = 1
	return f
}

// fieller takes the numerator less the estimated ratio times the denominator in place of the
// numerator: the same set, and no cancellation between variances far larger than what is left.
func (e *Effect) fieller(p, q float64, fp, fq linear, offset float64) null {
	if r := p / q; q != 0 && !math.IsInf(r, 0) && !math.IsNaN(r) {
		for role := range fq {
			if fq[role] == nil {
				continue
			}
			if fp[role] == nil {
				fp[role] = make([]float64, len(fq[role]))
			}
			for i, x := range fq[role] {
				fp[role][i] -= r * x
			}
		}
		p, offset = 0, offset-r
	}
	return null{method: fieller, p: p, q: q, offset: offset,
		vpp: e.covariance(fp, fp), vpq: e.covariance(fp, fq), vqq: e.covariance(fq, fq)}
}

// positive reports whether all four parts of a lift of ratios are.
func (e *Effect) positive() bool {
	s := e.estimate.Shape
	for _, arm := range e.arms {
		if !(arm.Mean[s.Num] > 0 && arm.Mean[s.Den] > 0) {
			return false
		}
	}
	return true
}

func (e *Effect) logarithm() null {
	s := e.estimate.Shape
	var f linear
	n := null{method: logarithm, nearest: math.Inf(1)}
	for role, arm := range e.arms {
		sign := 1.0
		if Role(role) == Zero {
			sign = -1
		}
		num, den := arm.Mean[s.Num], arm.Mean[s.Den]
		f[role] = make([]float64, len(arm.Mean))
		f[role][s.Num] = sign / num
		f[role][s.Den] -= sign / den
		n.log += sign * (math.Log(num) - math.Log(den))
		n.nearest = min(n.nearest, den/e.sd(e.mean(Role(role), s.Den)))
		if Role(role) == Zero {
			n.nearest = min(n.nearest, num/e.sd(e.mean(Zero, s.Num)))
		}
	}
	n.logSE = e.sd(f)
	return n
}

func (e *Effect) sd(f linear) float64 { return math.Sqrt(e.covariance(f, f)) }

// nearDivisor names a divisor that is too near zero for its size to be known.
func (e *Effect) nearDivisor() string {
	for role, arm := range e.arms {
		if arm == nil {
			continue
		}
		tell := func(what string, x float64, f linear) string {
			if sd := e.sd(f); !(math.Abs(x) >= far*sd) || x == 0 {
				return fmt.Sprintf("%s%s is %.3g standard errors from zero, and the error of this estimate is known only beyond %d", what, in(arm), math.Abs(x)/sd, far)
			}
			return ""
		}
		if e.estimate.Shape.Kind == Ratio {
			den := e.estimate.Shape.Den
			if why := tell("the denominator", arm.Mean[den], e.mean(Role(role), den)); why != "" {
				return why
			}
		} else {
			for _, d := range e.estimate.Divisors {
				var f linear
				f[role] = make([]float64, len(arm.Mean))
				x := d.Gradient(arm.Mean, f[role])
				if why := tell("a denominator", x, f); why != "" {
					return why
				}
			}
		}
		if e.contrast == relative && Role(role) == Zero {
			if why := tell("the value to compare with", e.at[Zero], linear{Zero: e.grad[Zero]}); why != "" {
				return why
			}
		}
	}
	return ""
}

// Z returns the test statistic of theta as the true value, standard normal for many
// units if it is, and positive when the estimate lies above theta. Not a number
// where Why says so.
//
//	one ratio                 the mean of num - theta den, over its standard error
//	relative lift of means    m1 - (1 + theta) m0, likewise
//	relative lift of ratios   on the logarithmic scale, where all parts are positive
//	anything else             Value - theta over StdError
func (e *Effect) Z(theta float64) float64 {
	if e.why != "" {
		return math.NaN()
	}
	switch n := &e.null; n.method {
	case fieller:
		t := theta + n.offset
		v := n.vpp - 2*t*n.vpq + t*t*n.vqq
		if v <= 0x1p-49*(n.vpp+2*math.Abs(t*n.vpq)+t*t*n.vqq) {
			v = 0
		}
		return math.Copysign(1, n.q) * (n.p - t*n.q) / math.Sqrt(v)
	case logarithm:
		if theta <= -1 {
			return math.Inf(1)
		}
		return (n.log - math.Log1p(theta)) / n.logSE
	default:
		return (e.value - theta) / e.se
	}
}

// Set returns the values theta with |Z(theta)| <= c, an interval that holds Value.
// Each end alone is the one-sided bound at the same c: the values with Z <= c are
// those from lo on. It is none, and why says so, where Why does or where it would be
// unbounded because a denominator is within c standard errors of zero.
//
//	in  c > 0, for example a normal or t quantile, or a sequential boundary's
func (e *Effect) Set(c float64) (lo, hi float64, why string) {
	none := math.NaN()
	if e.why != "" {
		return none, none, e.why
	}
	switch n := &e.null; n.method {
	case fieller:
		a := n.q*n.q - c*c*n.vqq
		if !(a > 0) {
			return none, none, e.unbounded(math.Abs(n.q)/math.Sqrt(n.vqq), c)
		}
		b := n.p*n.q - c*c*n.vpq
		// The discriminant b b - a (p p - c c vpp), with what cancels left out.
		d := n.q*n.q*n.vpp - 2*n.p*n.q*n.vpq + n.p*n.p*n.vqq - c*c*(n.vpp*n.vqq-n.vpq*n.vpq)
		r := c * math.Sqrt(max(0, d))
		return (b-r)/a - n.offset, (b+r)/a - n.offset, ""
	case logarithm:
		// The logarithm of a part that may be zero is not near normal, and an interval
		// that excludes infinity would not be honest.
		if !(n.nearest > c) {
			return none, none, e.unbounded(n.nearest, c)
		}
		return math.Expm1(n.log - c*n.logSE), math.Expm1(n.log + c*n.logSE), ""
	default:
		return e.value - c*e.se, e.value + c*e.se, ""
	}
}

func (e *Effect) unbounded(z, c float64) string {
	return fmt.Sprintf("unbounded: a denominator is only %.3g standard errors from zero, within the %.3g of the interval", z, c)
}
