package batch

import (
	"math"

	"gonum.org/v1/gonum/mathext"
	"stillwell/online/boundary/normal"
)

// EquivalentZ returns the z whose two-sided normal tail is that of t under Student's
// law with df degrees of freedom, with the sign of t: what a boundary for z takes
// in place of a t. It is nearer 0 than t.
//
//	in     df > 0; any t
//	error  relative, about 1e-12, in the far tails too
func EquivalentZ(t, df float64) float64 {
	if math.IsNaN(t) || !(df > 0) {
		return math.NaN()
	}
	if math.IsInf(t, 0) || math.IsInf(df, 1) || t == 0 {
		return t
	}
	u := math.Abs(t) / math.Sqrt(df)
	if u < 1 {
		if within := mathext.RegIncBeta(0.5, df/2, u*u/(1+u*u)); within < 0.5 {
			return math.Copysign(math.Sqrt2*math.Erfinv(within), t)
		}
	}
	tail := mathext.RegIncBeta(df/2, 0.5, 1/(1+u*u))
	logTail := math.Log(tail)
	if tail < 1e-250 {
		logTail = logFarTail(u, df)
	}
	return math.Copysign(normal.UpperQuantile(logTail-math.Ln2), t)
}

// logFarTail is the logarithm of the two-sided tail of u sqrt(df), where the tail
// itself may underflow: I_x(df/2, 1/2) at x = 1/(1+u^2) by its power series.
func logFarTail(u, df float64) float64 {
	a := df / 2
	logX := -2 * math.Log(math.Hypot(1, u))
	x := math.Exp(logX)
	sum, term := 1.0, 1.0
	for n := 1.0; term > 1e-17*sum && n < 1e6; n++ {
		term *= x * (a + n - 0.5) / (a + n)
		sum += term
	}
	return a*logX + 0.5*math.Log1p(-x) - math.Log(a) - mathext.Lbeta(a, 0.5) + math.Log(sum)
}
