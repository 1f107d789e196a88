// Package normal holds the few functions of the standard normal law that
// sequential boundaries need, in a form that keeps its digits in the far tails.
// All of them rest on one: the logarithm of Mills' ratio.
package normal

import (
	"math"

	"gonum.org/v1/gonum/mathext"
)

// logSqrt2Pi is log sqrt(2 pi).
const logSqrt2Pi = 0.91893853320467274178032973640561763986139747363778341281715154

// LogMills returns log(Q(x) / phi(x)), Q the upper tail probability and phi the
// density of the standard normal law, for any x.
//
//	out    falls with x: about x^2/2 + 0.9189 far below 0, about -log(x) far above
//	error  a few units in the last place of max(1, x^2/2)
func LogMills(x float64) float64 {
	if x > 25 {
		// Asymptotic series: the first term left out is below 1e-16 here; erfc would underflow at 38.
		r := 1 / (x * x)
		s := -r * (1 - 3*r*(1-5*r*(1-7*r*(1-9*r*(1-11*r*(1-13*r))))))
		return math.Log1p(s) - math.Log(x)
	}
	return math.Log(0.5*math.Erfc(x/math.Sqrt2)) + x*x/2 + logSqrt2Pi
}

// Weight returns x^2/2 + log Phi(x): the logarithm of the likelihood ratio against
// 0 of all drifts upwards, mixed evenly, up to a constant. It rises with x, from
// minus infinity to infinity.
func Weight(x float64) float64 { return LogMills(-x) - logSqrt2Pi }

// LogCDF returns log Phi(x).
func LogCDF(x float64) float64 {
	if x > 0 {
		return math.Log1p(-0.5 * math.Erfc(x/math.Sqrt2))
	}
	return Weight(x) - x*x/2
}

// Survival returns Q(x) = 1 - Phi(x), with full relative accuracy down to the
// smallest numbers there are.
func Survival(x float64) float64 { return 0.5 * math.Erfc(x/math.Sqrt2) }

// LogDensity returns log phi(x).
func LogDensity(x float64) float64 { return -x*x/2 - logSqrt2Pi }

// UpperQuantile returns the z with log Q(z) = logTail, for logTail < 0. It accepts
// probabilities that underflow as numbers but not as logarithms.
func UpperQuantile(logTail float64) float64 {
	if !(logTail < 0) {
		return math.NaN()
	}
	if logTail > -690 {
		if logTail > -math.Ln2 { // the lower half, by its complement, which keeps its digits
			return mathext.NormalQuantile(-math.Expm1(logTail))
		}
		return -mathext.NormalQuantile(math.Exp(logTail))
	}
	// Newton on log Q, which is nearly a parabola out here; the slope is -1/Mills.
	z := math.Sqrt(-2 * (logTail + logSqrt2Pi))
	for range 50 {
		d := (LogCDF(-z) - logTail) * math.Exp(LogMills(z))
		z += d
		if math.Abs(d) <= 1e-15*z {
			break
		}
	}
	return z
}
