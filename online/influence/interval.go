package influence

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/mathext"
)

const (
	leastUnits    = 5  // an arm, for any interval
	leastOutcomes = 25 // successes, and failures, for an interval of 0/1 scores by their variance
)

// Interval returns the interval for one look fixed beforehand, or why there is none:
// the Set at the t quantile with Freedom degrees. Of 0/1 scores with fewer than 25
// successes or failures in an arm it is the score interval instead, which needs no
// estimate of the variance; adjusted ones have none.
//
//	in  level in (0, 1), for example 0.95
func (e *Effect) Interval(level float64) (lo, hi float64, why string) {
	none := math.NaN()
	if !(level > 0 && level < 1) {
		return none, none, fmt.Sprintf("level %g, want one between 0 and 1", level)
	}
	for _, arm := range e.arms {
		if arm != nil && arm.Units < leastUnits {
			return none, none, fmt.Sprintf("%d units%s, and an interval needs %d", arm.Units, in(arm), leastUnits)
		}
	}
	tail := (1 - level) / 2
	if arm := e.fewOutcomes(); arm != nil {
		if e.pool() != nil {
			return none, none, fmt.Sprintf("fewer than %d successes or failures%s, too few for an adjusted interval", leastOutcomes, in(arm))
		}
		return e.scoreInterval(-mathext.NormalQuantile(tail))
	}
	if e.why != "" {
		return none, none, e.why
	}
	return e.Set(StudentUpper(tail, e.freedom))
}

// successes returns how many units of an arm score 1, for Binary.
func (e *Effect) successes(arm *Arm) float64 {
	return math.Round(arm.Mean[e.estimate.Shape.Num] * float64(arm.Units))
}

// fewOutcomes returns an arm of 0/1 scores in which the normal law cannot be relied on.
func (e *Effect) fewOutcomes() *Arm {
	if !e.estimate.Binary {
		return nil
	}
	for _, arm := range e.arms {
		if arm != nil {
			if x := e.successes(arm); min(x, float64(arm.Units)-x) < leastOutcomes {
				return arm
			}
		}
	}
	return nil
}

func (e *Effect) scoreInterval(z float64) (lo, hi float64, why string) {
	x1, n1 := e.successes(e.arms[One]), float64(e.arms[One].Units)
	if e.contrast == single {
		lo, hi = wilson(x1, n1, z)
		return lo, hi, ""
	}
	x0, n0 := e.successes(e.arms[Zero]), float64(e.arms[Zero].Units)
	if e.contrast == difference {
		lo, hi = scoreDifference(x1, n1, x0, n0, z)
		return lo, hi, ""
	}
	if lo, hi = scoreRatio(x1, n1, x0, n0, z); math.IsInf(hi, 1) {
		return math.NaN(), math.NaN(), "unbounded: no successes" + in(e.arms[Zero])
	}
	return lo - 1, hi - 1, ""
}
