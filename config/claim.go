package config

import (
	"fmt"
	"slices"
	"strings"
	"time"

	"stillwell/online"
	"stillwell/online/boundary"
	"stillwell/online/expr"
)

// scale is on which an estimate is tested and its intervals are made.
type scale uint8

const (
	linear  scale = iota // a mean, or a difference of means
	ratio                // mean(y) / mean(w): by the mean of y - theta w
	lift                 // of means: by m1 - (1 + theta) m0
	logs                 // lift of ratios: by the difference of logarithms
	tangent              // anything else: the delta method
)

// scaleOf finds the scale on which an estimate is linear under its null, if there is one.
func scaleOf(e *online.Estimate) scale {
	shape := e.Of.Shape()
	if shape == expr.Mean && maybeAbsent(e) != "" {
		shape = expr.Ratio // the score's sum over the units that have it
	} else if maybeAbsent(e) != "" {
		shape = expr.Smooth
	}
	means := shape == expr.Mean || shape == expr.Linear
	switch {
	case means && e.Contrast == online.Relative:
		return lift
	case means:
		return linear
	case shape == expr.Ratio && e.Contrast == online.NoContrast:
		return ratio
	case shape == expr.Ratio && e.Contrast == online.Relative:
		return logs
	}
	return tangent
}

func (p *page) estimate(plan *online.Plan, s *online.Study, e *online.Estimate) {
	p.head(2, "estimate %s", e.Name)
	p.value(s, e)
	p.influence(s, e)
	p.variance(s, e)
	p.oneLook(s, e)
	p.anyLook(plan, s, e)
}

func (p *page) value(s *online.Study, e *online.Estimate) {
	g := e.Of.String()
	each := ""
	if names := others(&s.Units); len(names) > 1 {
		each = ", for each of " + strings.Join(names, ", ")
	} else if len(names) == 0 {
		each = ", for each arm that is seen"
	}
	switch arm := armWord(s); e.Contrast {
	case online.NoContrast:
		of := ""
		if s.Units.Arm >= 0 {
			of = ", of each arm"
		}
		p.item(4, "value", "%s%s", g, of)
	case online.Difference:
		p.item(4, "value", "g(%s) - g(%s), where g = %s%s", arm, s.Units.Baseline, g, each)
	case online.Relative:
		p.item(4, "value", "g(%s) / g(%s) - 1, where g = %s%s", arm, s.Units.Baseline, g, each)
	}
	if absent := maybeAbsent(e); absent != "" {
		p.item(4, "present", "a unit may lack %s; its mean is over the units that have it%s", absent,
			map[bool]string{true: ", as among: present says. They may be others in each arm; readings show their share", false: ""}[e.Present])
	}
	if e.Window > 0 {
		p.item(4, "window", "over the units that became complete in the last %s, moving by steps", FormatDuration(e.Window))
	}
}

// armWord is how formulas call the arm that is compared.
func armWord(s *online.Study) string {
	if names := others(&s.Units); len(names) == 1 {
		return names[0]
	}
	return "arm"
}

func (p *page) influence(s *online.Study, e *online.Estimate) {
	psi := e.Of.Influence()
	base, arm := s.Units.Baseline, armWord(s)
	switch e.Contrast {
	case online.NoContrast:
		p.item(4, "influence", "of a unit: %s", psi)
	case online.Difference:
		p.item(4, "influence", "of a unit: psi in %s and -psi in %s, where psi is, with the means of its own arm, %s", arm, base, psi)
	case online.Relative:
		p.item(4, "influence", "of a unit: psi / g(%s) in %s and -psi g(%s) / g(%s)^2 in %s, where psi is, with the means of its own arm, %s", base, arm, arm, base, base, psi)
	}
	if names := adjusters(e); len(names) > 0 {
		p.item(4, "adjusted", "by %s: in each arm the scores are regressed on x = (%s), and the arm's means are moved to the mean of x over all arms. In psi the scores give way to their residuals, and each unit adds slope (x - mean(x)), its part in that mean. A covariate that the others determine is left out, and readings say so",
			strings.Join(names, " and "), strings.Join(names, ", "))
	}
}

func adjusters(e *online.Estimate) []string {
	var names []string
	for _, c := range e.Adjust {
		names = append(names, c.Name)
	}
	return names
}

func (p *page) variance(s *online.Study, e *online.Estimate) {
	over := "over the arms, each arm's sum of squared influence values / (n (n - 1))"
	if e.Contrast == online.NoContrast {
		over = "sum of squared influence values / (n (n - 1))"
	}
	switch {
	case s.Units.Kind == online.Buckets:
		p.item(4, "variance", "of batch means, since neighbouring buckets are alike: 64 to 128 batches, their variance times (1 + r) / (1 - r), where r is the correlation of neighbouring batches with a margin; shown only while that correlation is below 0.3")
	case len(e.Adjust) > 0:
		n := len(e.Adjust)
		p.item(4, "variance", "over the arms, each arm's residual sum of squares / (n (n - 1 - p)), p = %d%s, and a part for the pooled mean of x over all arms (Lin 2013)",
			n, map[bool]string{true: " and one more for each covariate that units may lack", false: ""}[mayLack(s, e)])
	default:
		p.item(4, "variance", "%s", over)
	}
}

// mayLack: a covariate can be absent, and then has an indicator beside it.
func mayLack(s *online.Study, e *online.Estimate) bool {
	return slices.ContainsFunc(e.Adjust, func(c online.Covariate) bool {
		return c.Tally < 0 || startsAbsent(s.Tallies[c.Tally].Kind)
	})
}

// oneLook says how the interval for a look fixed beforehand is made.
func (p *page) oneLook(s *online.Study, e *online.Estimate) {
	df := "t, with Welch's degrees of freedom"
	switch {
	case s.Units.Kind == online.Buckets:
		df = "t, with one degree of freedom less than batches"
	case e.Contrast == online.NoContrast:
		df = "t, with n - 1 degrees of freedom"
	}
	how := map[scale]string{
		linear:  "value +- " + df + ", times std_error",
		ratio:   "every R that the mean of " + underNull(e) + " does not rule out (Fieller's set; " + df + "); null where that set has no end",
		lift:    "every lift L that g(" + armWord(s) + ") - (1 + L) g(" + s.Units.Baseline + ") does not rule out (Fieller's set; " + df + "); null where that set has no end",
		logs:    "on the scale of logarithms, where all parts are positive (" + df + ")",
		tangent: "by the delta method (" + df + "), with every denominator at least 10 of its standard errors away from 0",
	}[scaleOf(e)]
	floor := "None with fewer than 5 units in an arm"
	switch {
	case s.Units.Kind == online.Buckets:
		floor = "None while fewer than 64 batches tell the variance"
	case s.Units.Arm < 0:
		floor = "None with fewer than 5 units"
	}
	if binary(e) && s.Units.Kind != online.Buckets {
		floor += "; with fewer than 25 successes or failures a score interval or none"
	}
	p.item(4, "one look", "interval: %s. %s. It holds for one look fixed beforehand", how, floor)
}

// underNull is the score whose mean is 0 if a ratio is R.
func underNull(e *online.Estimate) string {
	scores := e.Of.Scores()
	if i, j, ok := e.Of.Ratio(); ok {
		return operand(scores[i].String()) + " - R " + operand(scores[j].String())
	}
	i, _ := e.Of.Mean()
	return operand(scores[i].String()) + " - R over the units that have it"
}

// binary: the estimate is the mean of one 0/1 score.
func binary(e *online.Estimate) bool {
	i, ok := e.Of.Mean()
	return ok && e.Of.Scores()[i].Binary() && maybeAbsent(e) == ""
}

// anyLook says whether there is an interval for all looks together, how, and since when.
func (p *page) anyLook(plan *online.Plan, s *online.Study, e *online.Estimate) {
	if shaken(s, e) && e.Window == 0 && !endless(&s.Units) {
		p.item(4, "any look", "anytime: null until the series spans 64 whole days, because what happens on a day moves all its units alike; from then on from the variance of batches of whole days, and shown only while neighbouring batches are hardly correlated. A watch needs a comparison of arms, or time buckets as units")
		return
	}
	if why, ways := neverAnytime(s, e); why != "" {
		p.item(4, "any look", "anytime: null, because %s. To have one, %s", why, strings.Join(ways, ", or "))
		return
	}
	alpha := 1 - plan.Level
	p.item(4, "any look", "anytime: %s; error %s at all looks together. Asymptotic", method(s, e.TuneFor, e.Start), percent(alpha))
	p.gate(s, e, boundary.Gate{Error: alpha})
}

// shaken: an estimate over units that what happens on a day moves together.
func shaken(s *online.Study, e *online.Estimate) bool {
	return e.Contrast == online.NoContrast && s.Units.Kind != online.Buckets
}

// neverAnytime says why an estimate can have no interval that holds at all looks, and
// so no watch, whatever the data, and what to do instead; "" if it can.
func neverAnytime(s *online.Study, e *online.Estimate) (why string, ways []string) {
	switch {
	case endless(&s.Units):
		return "without `units.follow_up` no unit is ever complete, and totals that still grow allow no interval that is valid at every look",
			[]string{"say when a unit is complete (units.follow_up, as in follow_up: 24h)", "use time buckets as units (units: {every: 5m})"}
	case e.Window > 0:
		return "what a window estimates moves with it, so that no interval can hold at all looks together",
			[]string{"leave `window` away"}
	case shaken(s, e):
		compare := "compare arms (contrast)"
		if s.Units.Kind == online.EventsAlone {
			compare = "make whoever sends the events the unit (units.key), and compare arms (contrast)"
		}
		return "units of the same days share what those days brought, which is not in the standard error; a comparison of arms cancels it",
			[]string{compare, "use time buckets as units (units: {every: 5m}), whose variance is that of a series"}
	}
	return "", nil
}

// method names a boundary in words.
func method(s *online.Study, tuneFor float64, start time.Duration) string {
	switch {
	case start > 0:
		return fmt.Sprintf("delayed start, silent until %s after the stream's first event, or after units.from", FormatDuration(start))
	case tuneFor > 0:
		of := "complete units"
		if s.Units.Arm >= 0 {
			of += " of the compared arms"
		}
		return fmt.Sprintf("normal mixture, tightest at %s %s", number(tuneFor), of)
	}
	return fmt.Sprintf("normal mixture, tightest at %d times the units at the first step that passes the gate", boundary.DefaultTuning)
}

// gate says in numbers when an asymptotic boundary may speak.
func (p *page) gate(s *online.Study, e *online.Estimate, g boundary.Gate) {
	if s.Units.Kind == online.Buckets {
		p.item(4, "speaks", "from 64 batches on")
		return
	}
	k := g.K()
	text := fmt.Sprintf("when every arm has at least max(%d, %.0f g^2) complete units, g being the skewness of its influence values (%.0f at g = 1, %.0f at g = 3, %.0f at g = 10)",
		boundary.LeastUnits, k, g.Needed(1), g.Needed(3), g.Needed(10))
	if binary(e) {
		text += fmt.Sprintf(", with %d successes and %d failures", boundary.LeastOutcomes, boundary.LeastOutcomes)
	}
	text += fmt.Sprintf(", and no unit holds more than %g%% of the sum of squares", 100*boundary.HeaviestShare)
	if !binary(e) {
		text += "; a cap on the score, as in min(…, 400), keeps single units from holding so much"
	}
	p.item(4, "speaks", "%s", text)
}

func (p *page) watch(s *online.Study, w *online.Watch) {
	e := &s.Estimates[w.Estimate]
	p.head(2, "watch %s", w.Name)
	null := number(w.Null)
	what := "`" + e.Name + "`"
	switch w.Against {
	case online.Equal:
		p.item(4, "alarm", "once, when the data rule out that %s is %s, on either side. If it is %s, an alarm is ever raised with chance %s at most", what, null, null, percent(w.Error))
	case online.AtLeast:
		p.item(4, "alarm", "once, when the data rule out that %s is %s or more. While it is, an alarm is ever raised with chance %s at most", what, null, percent(w.Error))
	case online.AtMost:
		p.item(4, "alarm", "once, when the data rule out that %s is %s or less. While it is, an alarm is ever raised with chance %s at most", what, null, percent(w.Error))
	}
	alpha := p.shares(s, w, e)
	p.item(4, "method", "%s%s. Its interval at its own error is `bound`. Asymptotic", method(s, w.TuneFor, w.Start), threshold(w, alpha))
	p.gate(s, e, boundary.Gate{Error: alpha, OneSided: w.Against != online.Equal,
		EqualShares: w.Against == online.Equal && w.Null == 0 && e.Contrast != online.NoContrast && equalShares(s.Units.Arms)})
}

// shares says how the error is shared, and returns that of one comparison.
func (p *page) shares(s *online.Study, w *online.Watch, e *online.Estimate) float64 {
	var sharers []string
	arms := 1
	if names := compared(s, e); len(names) > 1 {
		arms = len(names)
		sharers = append(sharers, "the arms "+strings.Join(names, ", "))
	}
	if len(w.Segments) > 0 {
		sharers = append(sharers, "the segments "+strings.Join(w.Segments, ", "))
	}
	text := percent(w.Error)
	alpha := boundary.EqualShare(w.Error, arms*max(1, len(w.Segments)))
	if len(sharers) > 0 {
		text += ", shared equally among " + strings.Join(sharers, " and ") + ": " + percent(alpha) + " each"
	}
	switch {
	case w.Any:
		alpha = boundary.SegmentShare(alpha, 1)
		text += "; of it the j-th segment in order of first entry has 6 / (pi^2 j^2), the first " + percent(alpha)
	case len(w.Segments) == 0:
		text += "; it speaks about everyone, not about segments"
	}
	p.item(4, "error", "%s", text)
	return alpha
}

// compared are the arms that a watch on the estimate speaks about.
func compared(s *online.Study, e *online.Estimate) []string {
	if e.Contrast != online.NoContrast {
		return others(&s.Units)
	}
	return armNames(s.Units.Arms)
}

func equalShares(arms []online.Arm) bool {
	return !slices.ContainsFunc(arms, func(a online.Arm) bool { return a.Share != arms[0].Share })
}

// threshold says how far from the null an estimate must lie where the boundary is tightest.
func threshold(w *online.Watch, alpha float64) string {
	one := w.Against != online.Equal
	if w.Start > 0 {
		return fmt.Sprintf("; there %.2f standard errors from the null are enough, and slowly more later", boundary.DelayedStart{OneSided: one}.Constant(alpha))
	}
	m := boundary.NormalMixture{OneSided: one}
	return fmt.Sprintf("; there %.2f standard errors from the null are enough", m.Critical(alpha, m.Tuning(alpha)))
}

func percent(x float64) string { return fmt.Sprintf("%.3g%%", 100*x) }
