// Package allocation tests, at every step, whether counts by arm agree with the
// shares that were planned. Where they do not, units have gone missing or been
// counted twice by arm, and no comparison of the arms means what it seems to.
package allocation

import "math"

// Concentration is the weight of the mixing law: as if so many units had been seen
// at the planned shares. It puts the power near them, where faults lie.
const Concentration = 100

// Error of one such check. Four of them leave a comparison at most one chance in a
// thousand to be blocked for nothing.
const Error = 0.00025

// LogE returns the logarithm of the e-value of counts against shares: the likelihood
// ratio of shares drawn from a Dirichlet law with parameters concentration times
// shares, against the shares themselves. Its mean under the null is 1 at every stopping time.
//
//	in      counts >= 0; as many shares > 0 that add up to 1; concentration > 0
//	out     0 for no counts; NaN for lengths that differ
//	error   absolute, about 1e-16 times n log n, n the sum of counts
//	source  Lindon, Malek 2022, Anytime-valid inference for multinomial count data, NeurIPS; arXiv 2011.03567
func LogE(counts []int64, shares []float64, concentration float64) float64 {
	if len(counts) != len(shares) {
		return math.NaN()
	}
	var n, logE float64
	for i, c := range counts {
		a, c := concentration*shares[i], float64(c)
		n += c
		logE += logGamma(a+c) - logGamma(a) - c*math.Log(shares[i])
	}
	return logE - (logGamma(concentration+n) - logGamma(concentration))
}

// logGamma is log Gamma(x) for x > 0.
func logGamma(x float64) float64 {
	v, _ := math.Lgamma(x)
	return v
}
