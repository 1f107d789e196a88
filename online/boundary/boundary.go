// Package boundary holds what is sequential: rules that may be looked at after every
// step and still keep their error, the gate before which they are silent, and the
// state machine that carries one of them from step to step.
//
// The statistic is z, an estimate less its null value in standard errors, of which
// the central limit theorem makes a Brownian motion in its own time: z = W(v)/sqrt(v).
// A boundary is a threshold for |z| (or z) that a Brownian motion without drift
// passes at any time with a stated probability at most. Two families are here:
//
//	NormalMixture  counts from v = 0, tightest at a chosen time; has an e-value
//	DelayedStart   silent until a time m, from there on tighter; spends all its error
//
// Both come two-sided and exactly one-sided. Thresholds and values are functions of
// nothing but their arguments; an argument outside its domain gives NaN, and NaN
// never crosses anything.
package boundary

import (
	"math"

	"stillwell/online/boundary/normal"
)

// EqualShare is the error of each of so many comparisons that share one error:
// all of them together err with at most that probability, whatever their dependence.
// The number must be declared beforehand; one that grew with the data would be chosen by them.
func EqualShare(err float64, comparisons int) float64 {
	if comparisons < 1 {
		return math.NaN()
	}
	return err / float64(comparisons)
}

// SegmentShare is the error of the j-th segment in order of first entry, j from 1,
// where segments are not declared: 6 err / (pi^2 j^2). However many appear, their
// shares add up to err at most.
func SegmentShare(err float64, j int) float64 {
	if j < 1 {
		return math.NaN()
	}
	return 6 * err / (math.Pi * math.Pi * float64(j) * float64(j))
}

// probability says whether p lies strictly between 0 and 1.
func probability(p float64) bool { return p > 0 && p < 1 }

// lowest is where the search for one-sided arguments ends below, and -lowest where
// p-values end above: Phi(-40) underflows.
const lowest = -40

// invertWeight returns the x >= lowest with normal.Weight(x) = w. Below
// Weight(lowest) it returns lowest, where every probability here is 1 to all digits.
func invertWeight(w float64) float64 {
	var lo, hi float64
	switch {
	case math.IsNaN(w):
		return math.NaN()
	case w > 1e300:
		return math.Sqrt(w) // beyond everything; and w+w would overflow
	case w > -math.Ln2: // x > 0, where log Phi(x) lies in [-log 2, 0]
		lo, hi = 0.9999*math.Sqrt(2*math.Max(0, w)), 1.0001*math.Sqrt(2*(w+math.Ln2)) // a hair wider, for rounding
	case w > normal.Weight(lowest):
		lo = lowest
	default:
		return lowest
	}
	return root(func(x float64) float64 { return normal.Weight(x) - w }, lo, hi)
}
