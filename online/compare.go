package online

import (
	"slices"

	"stillwell/online/adjust"
	"stillwell/online/influence"
)

// comparison is an estimate evaluated in one arm, or compared between two.
type comparison struct {
	index   int // of the estimate
	e       *Estimate
	el      *estimateLayout
	effect  *influence.Effect
	curves  *influence.Effect // of the units as they are, whatever their weights leave of them
	few     string            // why so few of them allow no interval for one look
	groups  [2]*group         // of the arm and, in a contrast, the baseline
	names   [2]string
	rest    []*group // other arms, whose covariates count
	counts  Counts
	keep    []int
	dropped []string
	present map[string]float64
	series  *lasting // without contrast: the effect with the variance of a series
}

// compare evaluates an estimate over complete units, or over all.
func (l *ledger) compare(estimate, arm, place int, complete bool, v *voice) *comparison {
	e, el := &l.s.Estimates[estimate], &l.l.estimates[estimate]
	c := &comparison{index: estimate, e: e, el: el}
	c.groups[0] = l.groups[groupKey{arm, place}]
	c.names[0] = l.arms.list[arm]
	who := []int{arm}
	if e.Contrast != NoContrast {
		c.groups[1] = l.groups[groupKey{l.baseline, place}]
		c.names[1] = l.arms.list[l.baseline]
		who = append(who, l.baseline)
	}
	for other := range l.arms.list {
		if g := l.groups[groupKey{other, place}]; g != nil && !slices.Contains(who, other) && len(el.covariates) > 0 {
			c.rest = append(c.rest, g)
		}
	}
	arms := l.armsOf(c, complete, v)
	c.effect = c.evaluate(el.of, arms)
	c.curves = c.effect
	if c.mixed(complete) {
		arms = c.thin(complete, arms)
	}
	c.count(l, complete, arm)
	if complete && e.Contrast == NoContrast && c.groups[0].series != nil && (e.Window == 0 || l.s.Units.Kind == Buckets) {
		c.series = l.inSeries(c, arms[0])
		if l.s.Units.Kind == Buckets && c.series.effect != nil {
			c.effect = c.series.effect
		}
	}
	return c
}

// evaluate makes an effect of the arms.
func (c *comparison) evaluate(of influence.Estimate, arms []influence.Arm) *influence.Effect {
	switch c.e.Contrast {
	case Difference:
		return influence.Difference(of, &arms[0], &arms[1])
	case Relative:
		return influence.Relative(of, &arms[0], &arms[1])
	}
	return influence.Single(of, &arms[0])
}

// armsOf are the arms' score means, adjusted where the estimate says so.
func (l *ledger) armsOf(c *comparison, complete bool, v *voice) []influence.Arm {
	groups := []*group{c.groups[0]}
	names := []string{c.name(0)}
	if c.groups[1] != nil {
		groups, names = append(groups, c.groups[1]), append(names, c.name(1))
	}
	compared := len(groups)
	if len(c.el.covariates) == 0 {
		var arms []influence.Arm
		for i, g := range groups {
			arms = append(arms, influence.NewArm(names[i], g.cell(complete, c.e.Window), c.el.inputs))
		}
		return arms
	}
	var moments []adjust.Arm
	for i, g := range append(groups, c.rest...) {
		name := ""
		if i < compared {
			name = names[i]
		}
		moments = append(moments, adjust.FromCell(name, g.cell(complete, c.e.Window), c.el.inputs, c.el.covariates))
	}
	scores := len(c.el.inputs)
	keep, dropped := adjust.Choose(moments[:compared], scores)
	if v.keep != nil {
		keep, dropped = v.keep, nil
	}
	if keep == nil {
		keep = []int{}
	}
	c.keep = keep
	for _, d := range dropped {
		c.dropped = append(c.dropped, l.covariateName(c.el.covariates[d.Covariate])+": "+d.Why)
	}
	return adjust.Means(moments, scores, keep)[:compared]
}

// covariateName is the name of a covariate's component; empty for an indicator of presence.
func (l *ledger) covariateName(component int) string {
	for _, at := range l.l.covariates {
		name := ""
		if at.from < len(l.s.Tallies) {
			name = l.s.Tallies[at.from].Name
		} else {
			name = l.plan.Fields.Names()[l.l.entryFields[at.from-len(l.s.Tallies)]]
		}
		switch component {
		case at.value:
			return name
		case at.present:
			return name + " (whether present)"
		}
	}
	return ""
}

func (c *comparison) name(i int) string {
	if c.names[i] == "all" && c.groups[1] == nil {
		return ""
	}
	return c.names[i]
}

func (c *comparison) count(l *ledger, complete bool, arm int) {
	c.present = map[string]float64{}
	order := []int{0}
	if c.groups[1] != nil {
		order = []int{1, 0} // the baseline first
	}
	for _, i := range order {
		cell := c.groups[i].cell(complete, c.e.Window)
		c.counts = append(c.counts, Named{c.names[i], cell.Units()})
		for _, p := range c.el.presence {
			if cell.Units() > 0 {
				c.present[c.names[i]] = cell.Mean(p)
			}
		}
	}
}

// single tells whether an arm has fewer than two units.
func (c *comparison) single() bool {
	return slices.ContainsFunc(c.counts, func(n Named) bool { return n.N < 2 })
}
