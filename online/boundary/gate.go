package boundary

import (
	"fmt"
	"math"
	"strconv"
)

// What a gate asks for besides the units that the skewness needs. Rules of thumb,
// each backed by simulation of the error that is realised with it and without it.
const (
	LeastUnits    = 100  // an arm, whatever its skewness
	LeastOutcomes = 25   // successes, and failures, of a 0/1 score in an arm
	HeaviestShare = 0.05 // of an arm's sum of squared influence values, in one unit
)

// Gate says when the central limit theorem may be relied on for one comparison:
// the smaller its error, the further out in the tail it is used, and the more units
// a skewed score needs before that tail is right.
type Gate struct {
	Error    float64 // of the comparison after all sharing
	OneSided bool
	// EqualShares: the null is "no difference", two-sided, and the arms' planned shares
	// are equal, so that under the null the arms' skewness cancels. Not for intervals, which
	// speak about every other value too.
	EqualShares bool
}

// ArmEvidence is what a gate looks at in one arm. Everything is about the units
// whose score is present.
type ArmEvidence struct {
	Name      string  // "" where there are no arms
	Units     int64   //
	Skew      float64 // skewness of the estimate's influence values; NaN where they do not vary
	Heaviest  float64 // largest share of the arm's sum of squared influence values in one unit
	Binary    bool    // the score is 0 or 1
	Successes int64   // for Binary: units that score 1
	Failures  int64   // for Binary: units that score 0
}

// K is the number of units an arm needs for each unit of squared skewness:
// 50 (A/2.795)^6, A the two-sided delayed-start constant at the error (50, 153 and
// 451 at 0.05, 0.01 and 0.001), twice that one-sided, where skewness does not average
// out over the sides; 25 with EqualShares.
//
//	source  simulation of skewed laws (exponential, lognormal, Pareto), in the tests beside
func (g Gate) K() float64 {
	if g.EqualShares && !g.OneSided {
		return 25
	}
	k := 50 * math.Pow(DelayedStart{}.Constant(g.Error)/2.795, 6)
	if g.OneSided {
		return 2 * k
	}
	return k
}

// Needed is the number of units an arm of that skewness must have: max(100, K skew^2).
func (g Gate) Needed(skew float64) float64 {
	return math.Max(LeastUnits, math.Ceil(g.K()*skew*skew))
}

// Check returns "" when every arm passes, and otherwise the reason of the first
// that does not, for a person to read.
func (g Gate) Check(arms []ArmEvidence) (why string) {
	if len(arms) == 0 {
		return "not yet: no units"
	}
	for _, a := range arms {
		if why := g.checkArm(a); why != "" {
			return why
		}
	}
	return ""
}

// CheckBatches does the same for a series of batches, whose sums stand for units: those
// that lie far out count for the limit as single units of an arm do. What one
// batch holds of the variance is bounded by that too.
func (g Gate) CheckBatches(batches int, skew float64) (why string) {
	if need := math.Ceil(g.K() * skew * skew); !(float64(batches) >= need) {
		return fmt.Sprintf("not yet: %d of the %.0f batches that their skewness (%s) asks for; they grow less skewed as they grow longer",
			batches, need, strconv.FormatFloat(skew, 'g', 2, 64))
	}
	return ""
}

// checkArm compares such that NaN fails every test.
func (g Gate) checkArm(a ArmEvidence) string {
	has, of := "there are", ""
	if a.Name != "" {
		has, of = "arm "+a.Name+" has", " of arm "+a.Name
	}
	if a.Units < LeastUnits {
		return fmt.Sprintf("not yet: %s %d units, at least %d are needed", has, a.Units, LeastUnits)
	}
	if a.Binary && (a.Successes < LeastOutcomes || a.Failures < LeastOutcomes) {
		return fmt.Sprintf("not yet: %s %d successes and %d failures, at least %d of each are needed",
			has, a.Successes, a.Failures, LeastOutcomes)
	}
	if math.IsNaN(a.Skew) || math.IsInf(a.Skew, 0) {
		return fmt.Sprintf("not yet: %s %d units, but their influence values do not vary", has, a.Units)
	}
	if need := g.Needed(a.Skew); !(float64(a.Units) >= need) {
		return fmt.Sprintf("not yet: %s %d of the %.0f units that its skewness (%s) asks for",
			has, a.Units, need, strconv.FormatFloat(a.Skew, 'g', 2, 64))
	}
	if !(a.Heaviest <= HeaviestShare) {
		return fmt.Sprintf("one unit%s holds %.1f%% of the sum of squared influence values, more than the %.0f%% allowed: wait, or declare a cap on the score",
			of, 100*a.Heaviest, 100*HeaviestShare)
	}
	return ""
}
