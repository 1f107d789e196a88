package boundary

import (
	"math"

	"stillwell/online/boundary/normal"
)

// NormalMixture is the boundary of the likelihood ratio against no drift, mixed over
// drifts by a normal law (two-sided) or by the half of it that lies upwards. U is
// Brownian time in units of the mixing law's precision: U = S (time/n*) makes
// the threshold smallest at n*, with S = Tuning(alpha).
//
// The one-sided boundary is the exact one of the half-normal mixture. The two-sided
// one at twice the error looks like it and is a little lower everywhere: it
// promises alpha on each side only if both sides crossed apart, and passes alpha slightly.
//
//	source  Robbins 1970, Ann. Math. Stat. 41:1397; Howard, Ramdas, McAuliffe,
//	        Sekhon 2021, Ann. Stat. 49:1055, eq. 3.14; for estimates, Waudby-Smith,
//	        Arbour, Sinha, Kennedy, Ramdas 2024, Ann. Stat. 52:2613, thm. 2.2
type NormalMixture struct{ OneSided bool }

// Tuning returns S, the U at which Critical is smallest.
//
//	in   alpha in (0, 1)
//	out  two-sided: S = log(1+S) - 2 log alpha, and Critical(alpha, S) = sqrt(1+S)
func (m NormalMixture) Tuning(alpha float64) float64 {
	if !probability(alpha) {
		return math.NaN()
	}
	l := -2 * math.Log(alpha)
	if !m.OneSided {
		// S lies above l, as log(1+S) > 0, and below the other end, as log(1+S) < sqrt(S).
		return root(func(s float64) float64 { return s - math.Log1p(s) - l }, l, l+2*math.Sqrt(l)+2)
	}
	// dE/dU = 0 where U = x^2 + x phi(x)/Phi(x), with x = z sqrt(U/(1+U)); E = 1/alpha gives x.
	at := func(x float64) float64 { return x * (x + math.Exp(-normal.LogMills(-x))) }
	x := root(func(x float64) float64 {
		return 2*(normal.Weight(x)+math.Ln2) - math.Log1p(at(x)) - l
	}, 0, 4*math.Sqrt(l)+4)
	return at(x)
}

// Critical returns the threshold c: the sequence crosses where |z| >= c, or z >= c
// when one-sided.
//
//	in  alpha in (0, 1); u > 0
func (m NormalMixture) Critical(alpha, u float64) float64 {
	if !probability(alpha) || !(u > 0) {
		return math.NaN()
	}
	if !m.OneSided {
		return math.Sqrt((1 + 1/u) * (math.Log1p(u) - 2*math.Log(alpha)))
	}
	x := invertWeight(0.5*math.Log1p(u) - math.Log(alpha) - math.Ln2)
	return x * math.Sqrt(1+1/u)
}

// LogE returns the logarithm of the e-value of z at u > 0: the likelihood ratio,
// whose mean under the null is 1 at every stopping time. Critical(alpha, u) is
// where it is log(1/alpha).
func (m NormalMixture) LogE(z, u float64) float64 {
	if !(u > 0) {
		return math.NaN()
	}
	x := z / math.Sqrt(1+1/u)
	if !m.OneSided {
		return x*x/2 - 0.5*math.Log1p(u)
	}
	return normal.Weight(x) + math.Ln2 - 0.5*math.Log1p(u)
}

// P returns the p-value of z at u: 1/E, at most 1. Its running minimum is valid at all times together.
func (m NormalMixture) P(z, u float64) float64 {
	if e := m.LogE(z, u); !(e <= 0) { // NaN passes on
		return math.Exp(-e)
	}
	return 1
}
