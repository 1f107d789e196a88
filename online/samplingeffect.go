package online

import (
	"fmt"
	"slices"

	"stillwell/online/boundary"
	"stillwell/online/influence"
)

// With weights, an estimate's cells hold the values whose deviations are the units'
// influence values (see moment.Weighted), so that means are Hajek means, and variance, contrast,
// adjustment and skewness are what they always are. The slopes of an adjustment are then those of
// weighted deviations on weighted deviations, which leave the least variance; any fixed slopes
// are valid, since covariates are known before entry, and so independent of the arm. The mean
// of the covariates that all arms are adjusted to is that of the arms' Hajek means by the
// number of units kept. What weights do change is how many units the normal law and
// the variance can rely on; and counts of successes are no counts.

// mixed tells whether units of different weights take part in a comparison.
func (c *comparison) mixed(complete bool) bool {
	return slices.ContainsFunc(c.involved(), func(g *group) bool { return g.strata(complete, c.e.Window).mixed() })
}

func (c *comparison) involved() []*group {
	out := []*group{c.groups[0]}
	if c.groups[1] != nil {
		out = append(out, c.groups[1])
	}
	return append(out, c.rest...)
}

// thin evaluates the effect with as many units and degrees of freedom as those kept are worth,
// and returns the arms so. Value and standard error stay.
func (c *comparison) thin(complete bool, arms []influence.Arm) []influence.Arm {
	arms = slices.Clone(arms) // the curves rest on the others
	of := c.el.of
	of.Binary = false
	for i := range arms {
		a := &arms[i]
		s := c.groups[i].strata(complete, c.e.Window)
		ofMean, ofVariance := s.effective()
		if c.el.of.Binary {
			successes := s.cell().Mean(c.el.inputs[of.Shape.Num]) * ofMean
			if min(successes, ofMean-successes) < boundary.LeastOutcomes {
				c.few = fmt.Sprintf("fewer than %d successes or failures%s as units weigh, too few for an interval of a sample", boundary.LeastOutcomes, inArm(a.Name))
			}
		}
		spent := float64(a.Units) - a.Freedom // by mean and covariates
		a.Units = int64(ofMean)
		if a.Freedom = min(a.Freedom, ofVariance-spent); a.Freedom < 1 {
			a.Freedom = 0 // which the effect takes for too few
		}
	}
	if pool := arms[0].Pool; pool != nil {
		thinned := c.thinPool(complete, *pool)
		for i := range arms {
			arms[i].Pool = thinned
		}
	}
	c.effect = c.evaluate(of, arms)
	return arms
}

// thinPool gives the mean of all arms' covariates as many degrees of freedom as units are
// worth, and leaves its variance.
func (c *comparison) thinPool(complete bool, p influence.Pool) *influence.Pool {
	all := newStrata(c.groups[0].strata(complete, c.e.Window).shape)
	for _, g := range c.involved() {
		all.merge(g.strata(complete, c.e.Window))
	}
	_, worth := all.effective()
	before := float64(p.Units) * float64(p.Units-1)
	p.Units = min(p.Units, max(2, int64(worth)))
	p.Co = slices.Clone(p.Co)
	for i := range p.Co {
		p.Co[i] *= float64(p.Units) * float64(p.Units-1) / before
	}
	return &p
}

func inArm(name string) string {
	if name == "" {
		return ""
	}
	return " in arm " + name
}

// weighed adds to a reason that units are counted by what they are worth.
func (c *comparison) weighed(why string) string {
	if why == "" || !c.mixed(true) {
		return why
	}
	return why + "; units of different weights count as fewer"
}

// overWeighted writes a curve over a unit's numbers as one over their products with its
// weight w, and w. With m the means and wbar the mean weight of its group, the value of the unit
// is weight (m + w (z - m) / wbar - centre).
func (c *comparison) overWeighted(curve influence.Curve, of *strata) {
	last := len(curve.Weight) - 1
	units := of.Units()
	if of.weight() == float64(units) {
		return // all weights are 1
	}
	mean := of.weight() / float64(units)
	cell := of.cell()
	for i, component := range slices.Concat(c.el.inputs, c.el.covariates) {
		m := cell.Mean(component)
		curve.Weight[i] /= mean
		curve.Centre[i] = mean * (curve.Centre[i] - m)
		curve.Weight[last] -= curve.Weight[i] * m
	}
}
