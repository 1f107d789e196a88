package influence

import (
	"fmt"
	"math"
)

// Role says in which capacity an arm's units take part in an effect.
type Role uint8

const (
	One  Role = iota // the arm, or the one compared with the baseline
	Zero             // the baseline
	Rest             // any other arm, whose covariates count in an adjusted effect
)

// contrast says how the value in one arm is set against the baseline's.
type contrast uint8

const (
	single contrast = iota
	difference
	relative
)

// An Effect is an estimate evaluated in one arm, or compared between two. It refers to
// the arms, which must not change while it is in use; methods do not change it.
type Effect struct {
	estimate Estimate
	contrast contrast
	arms     [2]*Arm // Zero is nil without contrast
	at       [2]float64

	value   float64
	grad    linear     // of the value in the arms' means
	own     [2]float64 // variance that stems from each arm's units
	pooled  float64    // and from the covariates' mean
	se      float64
	freedom float64
	why     string // why there can be no interval, ever, from these numbers; "" if there can
	null    null
}

// linear is a linear functional of the arms' means: its weights in each, nil for
// none.
type linear [2][]float64

// Single evaluates an estimate in one arm.
func Single(f Estimate, arm *Arm) *Effect { return newEffect(f, single, arm, nil) }

// Difference compares by f(one) - f(zero).
func Difference(f Estimate, one, zero *Arm) *Effect { return newEffect(f, difference, one, zero) }

// Relative compares by f(one) / f(zero) - 1.
func Relative(f Estimate, one, zero *Arm) *Effect { return newEffect(f, relative, one, zero) }

func newEffect(f Estimate, contrast contrast, one, zero *Arm) *Effect {
	e := &Effect{estimate: f, contrast: contrast, arms: [2]*Arm{one, zero}}
	for role, arm := range e.arms {
		if arm != nil {
			e.grad[role] = make([]float64, len(arm.Mean))
			e.at[role] = f.Of.Gradient(arm.Mean, e.grad[role])
		}
	}
	e.null = e.newNull() // before the gradient becomes the contrast's
	one1, zero0 := e.at[One], e.at[Zero]
	switch contrast {
	case single:
		e.value = one1
	case difference:
		e.value = one1 - zero0
		scale(e.grad[Zero], -1)
	case relative:
		e.value = one1/zero0 - 1
		scale(e.grad[One], 1/zero0)
		scale(e.grad[Zero], -one1/(zero0*zero0))
	}
	e.own, e.pooled = e.variance(e.grad)
	v := e.own[One] + e.own[Zero] + e.pooled
	e.se = math.Sqrt(v)
	e.freedom = e.welch(v)
	e.why = e.fault()
	return e
}

func scale(x []float64, by float64) {
	for i := range x {
		x[i] *= by
	}
}

// welch returns the degrees of freedom of a sum of independent variance estimates.
//
//	source  Welch 1947, Biometrika 34:28; Satterthwaite 1946, Biometrics Bull. 2:110
func (e *Effect) welch(v float64) float64 {
	var sum float64
	for role, arm := range e.arms {
		if arm != nil && e.own[role] > 0 {
			sum += e.own[role] * e.own[role] / arm.Freedom
		}
	}
	if e.pooled > 0 {
		sum += e.pooled * e.pooled / float64(e.pool().Units-1)
	}
	return v * v / sum
}

// fault says why no interval can come of the effect.
func (e *Effect) fault() string {
	for _, arm := range e.arms {
		if arm != nil && arm.Why != "" {
			return arm.Why
		}
		if arm != nil && !(arm.Freedom > 0) {
			return fmt.Sprintf("too few units%s for a variance: %d", in(arm), arm.Units)
		}
	}
	switch {
	case math.IsNaN(e.value) || math.IsInf(e.value, 0):
		return "the estimate is not a finite number: a denominator is zero"
	case math.IsNaN(e.se) || math.IsInf(e.se, 0):
		return "the standard error is not a finite number"
	case e.se == 0:
		return "all units have the same influence: that is no information about the error"
	}
	return e.null.why
}

// in names an arm in a message.
func in(a *Arm) string {
	if a.Name == "" {
		return ""
	}
	return " in arm " + a.Name
}

// Value returns the estimate; it may be no finite number where a denominator is zero.
func (e *Effect) Value() float64 { return e.value }

// StdError returns the standard error of Value by its gradient, a description that
// is symmetric by nature; the interval need not be Value plus and minus a multiple.
func (e *Effect) StdError() float64 { return e.se }

// Freedom returns the degrees of freedom of StdError, by Welch and Satterthwaite.
func (e *Effect) Freedom() float64 { return e.freedom }

// Why says why these numbers allow no interval and no test; "" where they do.
func (e *Effect) Why() string { return e.why }

func (e *Effect) pool() *Pool { return e.arms[One].Pool }

// variance returns the variance of a linear functional of the means: from each arm's
// own units, and from the covariates' mean.
func (e *Effect) variance(f linear) (own [2]float64, pooled float64) {
	for role, arm := range e.arms {
		if f[role] != nil {
			own[role] = arm.form(f[role], f[role])
		}
	}
	if p := e.pool(); p != nil {
		h := e.carried(f)
		pooled = form(p.Co, h, h) / p.divisor()
	}
	return own, pooled
}

// covariance returns that of two linear functionals of the means.
func (e *Effect) covariance(f, g linear) float64 {
	var sum float64
	for role, arm := range e.arms {
		if f[role] != nil && g[role] != nil {
			sum += arm.form(f[role], g[role])
		}
	}
	if p := e.pool(); p != nil {
		sum += form(p.Co, e.carried(f), e.carried(g)) / p.divisor()
	}
	return sum
}

// carried returns the weights that a linear functional of adjusted means has, by the
// slopes, in the mean of each covariate.
func (e *Effect) carried(f linear) []float64 {
	h := make([]float64, len(e.pool().Mean))
	for role, arm := range e.arms {
		k := len(f[role])
		for i := range h {
			for j, x := range f[role] {
				h[i] += arm.Slopes[i*k+j] * x
			}
		}
	}
	return h
}

func (p *Pool) divisor() float64 { return float64(p.Units) * float64(p.Units-1) }

// form returns f' C g. What lies below the rounding of its terms is zero: scores in
// fixed proportion leave a ratio without error, not with a tiny one.
func form(c, f, g []float64) float64 {
	var sum, size float64
	for i, x := range f {
		if x == 0 {
			continue
		}
		for j, y := range g {
			term := float64(float64(x*y) * c[i*len(f)+j])
			sum += term
			size += math.Abs(term)
		}
	}
	if math.Abs(sum) <= 0x1p-49*size {
		return 0
	}
	return sum
}
