package online

import (
	"math"
	"slices"
	"time"

	"stillwell/online/boundary"
	"stillwell/online/influence"
	"stillwell/online/moment"
)

// heaviestKept is how many units of a group are kept as candidates for the heaviest of an
// estimate.
const heaviestKept = 24

// strata are the sums of a group's complete units, of those in a window, or of all so far.
func (g *group) strata(complete bool, span time.Duration) *strata {
	switch {
	case !complete:
		return g.all
	case span > 0:
		return windowOf(g.windows, span).sums
	}
	return g.complete
}

func (g *group) cell(complete bool, span time.Duration) *moment.Cell {
	return g.strata(complete, span).cell()
}

func (l *ledger) newHeavy() []*moment.Heavy {
	var out []*moment.Heavy
	for i := range l.l.estimates {
		el := &l.l.estimates[i]
		h, err := moment.NewHeavy(el.heavyWidth(), heaviestKept)
		if err != nil {
			panic(err) // an estimate has at least one input
		}
		out = append(out, h)
	}
	return out
}

// weigh offers a unit as a candidate for the heaviest of each estimate.
func (l *ledger) weigh(g *group, u *unit) {
	name, weight := unitName(u.Hash, u.At), math.Ldexp(1, int(u.Power))
	for i := range l.l.estimates {
		el := &l.l.estimates[i]
		z := l.scratch[:0]
		for _, c := range el.inputs {
			z = append(z, weight*u.z[c])
		}
		for _, c := range el.covariates {
			z = append(z, weight*u.z[c])
		}
		z = append(z, weight)
		l.scratch = z
		g.heavy[i].Add(name, z)
	}
}

func unitName(hash uint64, at int64) (n moment.Unit) {
	for i := range 8 {
		n[i], n[8+i] = byte(hash>>(56-8*i)), byte(uint64(at)>>(56-8*i))
	}
	return n
}

// components are an estimate's inputs and covariates, as its influence curves have them.
func (c *comparison) components() []int {
	out := slices.Clone(c.el.inputs)
	for _, k := range c.keep {
		out = append(out, c.el.covariates[k])
	}
	return out
}

// heavyWidth is how many numbers candidates for the heaviest have: inputs and covariates,
// weighted, and the weight.
func (el *estimateLayout) heavyWidth() int { return len(el.inputs) + len(el.covariates) + 1 }

// spread writes a curve over the kept covariates as one over all numbers that candidates
// for the heaviest have.
func (c *comparison) spread(curve influence.Curve, of *strata) influence.Curve {
	k, d := len(c.el.inputs), len(c.el.covariates)
	out := influence.Curve{Weight: make([]float64, k+d+1), Centre: make([]float64, k+d+1)}
	copy(out.Weight, curve.Weight[:k])
	copy(out.Centre, curve.Centre[:k])
	if len(curve.Weight) > k {
		for i, cov := range c.keep {
			out.Weight[k+cov], out.Centre[k+cov] = curve.Weight[k+i], curve.Centre[k+i]
		}
	}
	c.overWeighted(out, of)
	return out
}

// heaviest is the share of the variance that the single heaviest unit carries.
func (l *ledger) heaviest(c *comparison) *float64 {
	se := c.curves.StdError()
	if !(se > 0) || math.IsInf(se, 0) || c.e.Window > 0 || l.s.Units.Kind == Keyed && l.s.Units.FollowUp == 0 {
		return nil
	}
	most := 0.0
	at := c.index
	weigh := func(g *group, role influence.Role) {
		curve := c.spread(c.curves.Curve(role), g.complete)
		g.heavy[at].Focus(curve.Weight, curve.Centre)
		g.unsaved = true
		if _, psi, ok := g.heavy[at].Largest(curve.Weight, curve.Centre); ok {
			most = max(most, psi*psi)
		}
	}
	weigh(c.groups[0], influence.One)
	if c.groups[1] != nil {
		weigh(c.groups[1], influence.Zero)
	}
	for _, g := range c.rest {
		weigh(g, influence.Rest)
	}
	return finite(most / (se * se))
}

// look is what a sequence is shown: the comparison at a null, and why the gate fails.
func (l *ledger) look(T int64, c *comparison, gate boundary.Gate, null float64, start time.Duration, blocked string) boundary.Look {
	look := boundary.Look{StdError: c.effect.StdError(), Z: c.effect.Z(null), GateWhy: blocked, Started: true}
	for _, g := range c.groups {
		if g != nil {
			look.Units += g.complete.weight() // each stands for so many
		}
	}
	if start > 0 {
		look.Started = l.first != NoTime && T >= max(l.first, l.s.Units.From)+int64(start)
	}
	if c.series != nil {
		c.series.look(&look, null)
	}
	if look.GateWhy == "" {
		look.GateWhy = l.gateWhy(c, gate)
	}
	return look
}

// gateWhy says why the comparison cannot be trusted in the tail yet, "" where it can.
func (l *ledger) gateWhy(c *comparison, gate boundary.Gate) string {
	if why := c.effect.Why(); why != "" {
		return why
	}
	if c.series != nil {
		if c.series.why != "" && l.s.Units.Kind != Buckets {
			return "units of the same days share what those days brought, which only a comparison of arms cancels, or batches of at least 64 whole days; " + c.series.why
		}
		if c.series.why == "" {
			return gate.CheckBatches(c.series.batches, c.series.skew)
		}
		return c.series.why
	}
	var arms []boundary.ArmEvidence
	for i, g := range c.groups {
		if g != nil {
			arms = append(arms, l.armEvidence(c, i, g))
		}
	}
	return c.weighed(gate.Check(arms))
}

func (l *ledger) armEvidence(c *comparison, i int, g *group) boundary.ArmEvidence {
	role := influence.Role(i)
	curve, components := c.curves.Curve(role), c.components()
	cell := g.cell(true, 0)
	// What the rule asks for is a bound on skewness over the root of the number of units:
	// where these are counted as fewer, by weight or because a score is absent in them, the
	// skewness is that of fewer.
	units, _ := g.complete.effective()
	ev := boundary.ArmEvidence{Name: c.name(i), Units: int64(math.Round(units)), Skew: curve.Skewness(cell, components)}
	ev.Skew *= math.Sqrt(units / float64(cell.Units()))
	for _, p := range c.el.presence {
		share := cell.Mean(p)
		ev.Units = min(ev.Units, int64(math.Round(share*units)))
		ev.Skew *= math.Sqrt(share)
	}
	total := curve.SumOfSquares(cell, components)
	wide := c.spread(curve, g.complete)
	if _, psi, ok := g.heavy[c.index].Largest(wide.Weight, wide.Centre); ok && total > 0 {
		ev.Heaviest = psi * psi / total
	}
	if c.el.of.Binary {
		n := float64(ev.Units)
		ev.Binary = true
		ev.Successes = int64(math.Round(cell.Mean(c.el.inputs[c.el.of.Shape.Num]) * n))
		ev.Failures = ev.Units - ev.Successes
	}
	return ev
}
