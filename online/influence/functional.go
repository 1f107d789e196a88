// Package influence turns means and co-moments into estimates with their errors.
//
// Every estimate is a smooth functional of per-arm means of unit scores. Its value
// in a sample, its variance, and the part that each unit has in both follow from
// the gradient: the influence value of a unit with scores z in an arm with means m
// is grad.(z - m), and the variance of the estimate the sum of their squares (with
// n-1 in place of n). Means, ratios, weighted means, differences and relative
// lifts, adjusted for covariates or not, are one code path.
//
// A variance describes the estimate; a test of a value, and the interval that is
// the set of values not rejected, are taken where the functional is linear under
// that value as a null: the symmetric interval of a ratio or lift errs far to one
// side.
package influence

// A Functional is a smooth function of score means, such as m[0] / m[1]. It must
// be the same function always, and may be called for several arms.
type Functional interface {
	// Eval returns the value at means m.
	Eval(m []float64) float64
	// Gradient writes the partial derivatives at m to dst, all of them, and returns
	// the value.
	Gradient(m, dst []float64) float64
}

// Kind says how an estimate depends on the means.
type Kind uint8

const (
	Mean   Kind = iota // m[Num]
	Ratio              // m[Num] / m[Den]
	Linear             // weights times means, plus a constant
	Smooth             // anything else
)

// A Shape says what is known of a functional's form, which decides how it is
// tested. Saying Smooth of all is valid and asks for more data.
type Shape struct {
	Kind     Kind
	Num, Den int // for Mean and Ratio: indices of the means
}

// An Estimate is a functional with what its intervals need to know about it.
type Estimate struct {
	Of    Functional
	Shape Shape
	// Divisors are what must stay away from zero for a Smooth functional to be smooth:
	// denominators, arguments of roots and logarithms.
	Divisors []Functional
	// Binary: the estimate is the mean of one score that is 0 or 1 in every unit.
	// Only with Kind Mean.
	Binary bool
}
