// Package adjust takes from score means what covariates known before entry explain
// of their chance differences between arms.
//
// In each arm the scores are regressed on the covariates, and the arm's means are
// read off at the covariates' mean over all arms. Everything follows from the
// co-moments of scores and covariates; no unit is looked at again.
//
//	source  Lin 2013, Ann. Appl. Stat. 7:295, regression with treatment by covariate
//	        interactions; the term of the covariates' mean makes the variance that of a
//	        sample of units rather than of these units alone
package adjust

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/mat"

	"stillwell/online/influence"
	"stillwell/online/moment"
)

// worstCondition is that of the covariates' correlation matrix, in the 1-norm, from
// which on centred co-moments have too few digits left. Common practice, no source;
// the regressions of NIST StRD bear it out.
const worstCondition = 1e8

// An Arm holds the moments of one group: k scores, then d covariates.
type Arm struct {
	Name  string // for messages
	Units int64
	Mean  []float64 // k + d
	Co    []float64 // (k + d) x (k + d) in row order: co-moments, not divided
}

// FromCell returns the moments of the listed components of a cell.
func FromCell(name string, c *moment.Cell, scores, covariates []int) Arm {
	all := slices.Concat(scores, covariates)
	a := Arm{Name: name, Units: c.Units(), Mean: make([]float64, len(all)), Co: make([]float64, len(all)*len(all))}
	c.Means(all, a.Mean)
	c.Comoments(all, a.Co)
	return a
}

// in names the arm in a message.
func (a *Arm) in() string {
	if a.Name == "" {
		return ""
	}
	return " in arm " + a.Name
}

// co is the co-moment of quantities i and j.
func (a *Arm) co(i, j int) float64 { return a.Co[i*len(a.Mean)+j] }

// A Dropped covariate is not adjusted for.
type Dropped struct {
	Covariate int    // its place among the covariates
	Why       string // such as "does not vary in arm wide"
}

// Choose returns which covariates the arms can be adjusted for, ascending, and why
// not the others: taken in order, one is dropped where in some arm it does not vary,
// follows from those before it, or leaves no degree of freedom. The arms are those
// to be compared, each with the same number of scores before its covariates.
func Choose(arms []Arm, scores int) (keep []int, dropped []Dropped) {
	if len(arms) == 0 {
		return nil, nil
	}
	for c := range len(arms[0].Mean) - scores {
		with := append(keep, c)
		why := ""
		for i := range arms {
			if why = arms[i].refuses(scores, with); why != "" {
				break
			}
		}
		if why == "" {
			keep = with
		} else {
			dropped = append(dropped, Dropped{c, why})
		}
	}
	return keep, dropped
}

// refuses says why the arm cannot be adjusted for the covariates, of which the last
// is the one in question.
func (a *Arm) refuses(scores int, covariates []int) string {
	last := scores + covariates[len(covariates)-1]
	switch {
	case a.Units-1-int64(len(covariates)) < 1:
		return fmt.Sprintf("%d units%s are too few for %d covariates", a.Units, a.in(), len(covariates))
	case !(a.co(last, last) > 0):
		return "does not vary" + a.in()
	}
	if _, ok := a.factor(scores, covariates); !ok {
		return "follows from the covariates before it" + a.in()
	}
	return ""
}

// factor decomposes the correlation matrix of the covariates; ok is false where it is
// singular or nearly so.
func (a *Arm) factor(scores int, covariates []int) (chol mat.Cholesky, ok bool) {
	p := len(covariates)
	r := mat.NewSymDense(p, nil)
	for i, c := range covariates {
		if !(a.co(scores+c, scores+c) > 0) {
			return chol, false
		}
		for j, d := range covariates[:i+1] {
			r.SetSym(i, j, a.co(scores+c, scores+d)/math.Sqrt(a.co(scores+c, scores+c)*a.co(scores+d, scores+d)))
		}
	}
	return chol, chol.Factorize(r) && chol.Cond() < worstCondition
}

// Means returns the arms with their score means adjusted for the kept covariates, in
// the same order. All arms of the study are to be given, for all of them tell what
// the covariates' mean is; one that cannot be adjusted has its Why set. Without
// covariates kept the means are as they were.
func Means(arms []Arm, scores int, keep []int) []influence.Arm {
	out := make([]influence.Arm, len(arms))
	var pool *influence.Pool
	if len(keep) > 0 {
		pool = pooled(arms, scores, keep)
	}
	for i := range arms {
		out[i] = arms[i].adjusted(scores, keep, pool)
	}
	return out
}

// pooled is the mean of the covariates over all units, and their deviations from it:
// within the arms and between them.
func pooled(arms []Arm, scores int, keep []int) *influence.Pool {
	p := len(keep)
	pool := &influence.Pool{Mean: make([]float64, p), Co: make([]float64, p*p)}
	for _, a := range arms {
		pool.Units += a.Units
	}
	for i, c := range keep {
		for _, a := range arms {
			if a.Units > 0 {
				pool.Mean[i] += float64(a.Units) / float64(pool.Units) * a.Mean[scores+c]
			}
		}
	}
	for i, c := range keep {
		for j, d := range keep {
			for _, a := range arms {
				if a.Units > 0 {
					pool.Co[i*p+j] += a.co(scores+c, scores+d) +
						float64(a.Units)*(a.Mean[scores+c]-pool.Mean[i])*(a.Mean[scores+d]-pool.Mean[j])
				}
			}
		}
	}
	return pool
}

func (a *Arm) adjusted(k int, keep []int, pool *influence.Pool) influence.Arm {
	p := len(keep)
	out := influence.Arm{
		Name: a.Name, Units: a.Units, Freedom: float64(a.Units - 1 - int64(p)),
		Mean: slices.Clone(a.Mean[:k]), Cov: make([]float64, k*k), Pool: pool,
	}
	if p > 0 {
		out.Slopes = make([]float64, p*k)
		if out.Freedom > 0 {
			out.Why = a.regress(k, keep, out.Slopes)
		}
	}
	for i, c := range keep {
		for j := range k {
			out.Mean[j] -= out.Slopes[i*k+j] * (a.Mean[k+c] - pool.Mean[i])
		}
	}
	divisor := float64(a.Units) * out.Freedom
	for j := range k {
		for l := range j + 1 {
			rss := a.residual(k, keep, out.Slopes, j, l)
			out.Cov[j*k+l], out.Cov[l*k+j] = rss/divisor, rss/divisor
		}
	}
	return out
}

// regress writes the slopes of each score on each covariate.
func (a *Arm) regress(k int, keep []int, slopes []float64) (why string) {
	chol, ok := a.factor(k, keep)
	if !ok {
		return "the covariates do not vary, or follow from each other" + a.in()
	}
	p := len(keep)
	rhs := mat.NewDense(p, k, nil)
	for i, c := range keep {
		for j := range k {
			rhs.Set(i, j, a.co(k+c, j)/math.Sqrt(a.co(k+c, k+c)))
		}
	}
	b := mat.NewDense(p, k, slopes)
	if err := chol.SolveTo(b, rhs); err != nil {
		return fmt.Sprintf("regression on the covariates%s: %v", a.in(), err)
	}
	for i, c := range keep {
		for j := range k {
			slopes[i*k+j] /= math.Sqrt(a.co(k+c, k+c))
		}
	}
	return ""
}

// residual is the sum of products of what the slopes leave of scores j and l. Below
// the rounding of what it is taken from it is zero: a perfect fit leaves nothing.
func (a *Arm) residual(k int, keep []int, slopes []float64, j, l int) float64 {
	rss := a.co(j, l)
	for i, c := range keep {
		rss -= slopes[i*k+j]*a.co(k+c, l) + slopes[i*k+l]*a.co(k+c, j)
		for m, d := range keep {
			rss += slopes[i*k+j] * a.co(k+c, k+d) * slopes[m*k+l]
		}
	}
	if len(keep) > 0 && math.Abs(rss) <= 0x1p-46*math.Sqrt(a.co(j, j)*a.co(l, l)) {
		return 0
	}
	return rss
}
