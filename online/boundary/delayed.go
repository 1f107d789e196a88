package boundary

import (
	"math"

	"stillwell/online/boundary/normal"
)

// DelayedStart is the boundary that is silent before a time m and from there on
// spends its whole error, exactly for a Brownian motion: the mixture over all drifts
// alike (two-sided), or all drifts upwards, conditional on what is seen at m. Ratio is
// time over m, at least 1.
//
// The one-sided boundary is exact too; the two-sided one at twice the error is
// lower by a little and not valid in its place.
//
//	source  Robbins, Siegmund 1970, Ann. Math. Stat. 41:1410; for estimates Bibaut,
//	        Kallus, Lindon 2022, arXiv 2212.14411
type DelayedStart struct{ OneSided bool }

// logError is the logarithm of the probability of ever crossing when the threshold
// at m is a; it falls from 0, two-sided from a = 0 on. One-sided it is
// 1 - Phi(a) + phi(a) (a + phi(a)/Phi(a)), two-sided 2 (1 - Phi(a) + a phi(a)).
func (d DelayedStart) logError(a float64) float64 {
	if !d.OneSided {
		// 2 phi(a) (Q(a)/phi(a) + a): in logarithms, so that it does not underflow.
		return math.Ln2 + math.Log(a+math.Exp(normal.LogMills(a))) + normal.LogDensity(a)
	}
	if a < 1 {
		return math.Log(normal.Survival(a) + math.Exp(normal.LogDensity(a))*(a+math.Exp(-normal.LogMills(-a))))
	}
	return math.Log(a+math.Exp(normal.LogMills(a))+math.Exp(-normal.LogMills(-a))) + normal.LogDensity(a)
}

// Constant returns A, the threshold at the start.
//
//	in   alpha in (0, 1)
//	out  A with P(ever crossing) = alpha
func (d DelayedStart) Constant(alpha float64) float64 {
	if !probability(alpha) {
		return math.NaN()
	}
	l := math.Log(alpha)
	// Two-sided, Q(a)/phi(a) + a lies between sqrt(pi/2) and that plus a. One-sided errs
	// more than half as much at the same a, and less than as much where a > 0.
	lo, hi := 0.9999*math.Sqrt(-2*l), 0.8+math.Sqrt(0.64-2*l) // a hair wider, for rounding
	if d.OneSided {
		lo = lowest
		if alpha < 0.5 {
			lo = 0.9999 * math.Sqrt(-2*(l+math.Ln2))
		}
	}
	return root(func(a float64) float64 { return d.logError(a) - l }, lo, hi)
}

// Critical returns the threshold at time ratio*m: the sequence crosses where
// |z| >= c, or z >= c when one-sided.
//
//	in  alpha in (0, 1); ratio >= 1
func (d DelayedStart) Critical(alpha, ratio float64) float64 {
	a := d.Constant(alpha)
	if !(ratio >= 1) {
		return math.NaN()
	}
	if !d.OneSided {
		return math.Sqrt(a*a + math.Log(ratio))
	}
	return invertWeight(normal.Weight(a) + 0.5*math.Log(ratio))
}

// P returns the p-value of z at time ratio*m: the error at which z would lie just on
// the threshold. Its running minimum from m on is valid at all times together.
func (d DelayedStart) P(z, ratio float64) float64 {
	if !(ratio >= 1) {
		return math.NaN()
	}
	var a float64
	if d.OneSided {
		a = invertWeight(normal.Weight(z) - 0.5*math.Log(ratio))
	} else {
		a = math.Sqrt(math.Max(0, z*z-math.Log(ratio)))
	}
	if a > -lowest {
		return 0
	}
	return math.Min(1, math.Exp(d.logError(a)))
}
