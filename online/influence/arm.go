package influence

import "stillwell/online/moment"

// An Arm is what an estimate sees of one group of units: k score means and their
// errors. Adjusted means differ from others by what Slopes and Pool say.
type Arm struct {
	Name    string // for messages; "" where there are no arms
	Units   int64
	Freedom float64   // Units - 1, less the number of covariates
	Mean    []float64 // k
	Cov     []float64 // k x k in row order: covariance of Mean that stems from the arm's own units
	Low     []float64 // what rounding has left of Cov; nil where that is not known
	Slopes  []float64 // p x k in row order: of each score on each covariate; nil unadjusted
	Pool    *Pool     // the covariates of all units, the same for both arms of a contrast; nil unadjusted
	Why     string    // why Mean is not known, and then no effect is; "" if it is
}

// A Pool holds p covariates over the units of all arms: adjusted means are as of
// its mean, and what that mean could have been is the part of their error that
// arms have in common.
type Pool struct {
	Units int64
	Mean  []float64 // p
	Co    []float64 // p x p in row order: sums of products of deviations, not divided
}

// NewArm returns the arm of the units in a cell, for an estimate of the means of
// the listed components: Cov is their co-moments over n (n - 1).
func NewArm(name string, c *moment.Cell, components []int) Arm {
	k := len(components)
	buf := make([]float64, k+2*k*k)
	a := Arm{Name: name, Units: c.Units(), Freedom: float64(c.Units() - 1), Mean: buf[:k:k], Cov: buf[k : k+k*k : k+k*k], Low: buf[k+k*k:]}
	c.Means(components, a.Mean)
	c.MeanCovariance(components, a.Cov, a.Low)
	return a
}

// form returns f' Cov g.
func (a *Arm) form(f, g []float64) float64 {
	if a.Low != nil {
		return moment.Form(a.Cov, a.Low, f, g)
	}
	return form(a.Cov, f, g)
}
