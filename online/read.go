package online

import (
	"math"
	"slices"

	"stillwell/online/boundary"
)

// read makes the reading of an estimate in an arm.
func (l *ledger) read(T int64, estimate, arm, place int, v *voice) *Reading {
	e, s := &l.s.Estimates[estimate], l.s
	r := &Reading{Kind: "reading", Study: s.Name, Estimate: e.Name, Contrast: e.Contrast.String(),
		Segment: l.segment(place), Time: timeText(T), Level: l.plan.Level, Sampling: l.door.probability(), Gap: l.gapText()}
	if s.Units.Arm >= 0 {
		r.Arm = l.arms.list[arm]
		if e.Contrast != NoContrast {
			r.Baseline = s.Units.Baseline
		}
	}
	if s.Units.Kind == EventsAlone {
		r.Assumes = "independent events"
	}
	timeless := s.Units.Kind == Keyed && s.Units.FollowUp == 0 // no unit is ever complete
	c := l.compare(estimate, arm, place, !timeless, v)
	r.Units = c.counts
	r.Value, r.StdError = finite(c.effect.Value()), finite(c.effect.StdError())
	if c.single() {
		r.StdError = nil // of one unit nothing is known of the spread
	}
	r.Dropped = c.dropped
	if e.Present {
		r.Present = c.present
	}
	if r.Value == nil {
		r.because("value", c.effect.Why())
	}
	if r.StdError == nil {
		r.because("std_error", c.effect.Why())
	}
	blocked := l.blocked(e, place)
	l.readInterval(r, c, blocked)
	if v.seq != nil && !timeless {
		l.readAnytime(T, r, c, v, blocked)
	} else {
		r.because("anytime", l.whyNoAnytime(e))
	}
	r.Heaviest = l.heaviest(c)
	if !timeless && e.Window == 0 {
		l.readProvisional(r, estimate, arm, place, v)
	}
	return r
}

func (r *Reading) because(field, why string) {
	if why == "" {
		why = "undefined for these data"
	}
	if r.Why == nil {
		r.Why = map[string]string{}
	}
	r.Why[field] = why
}

func finite(x float64) *float64 {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return nil
	}
	return &x
}

func (l *ledger) readInterval(r *Reading, c *comparison, blocked string) {
	lo, hi, why := c.interval(l.plan.Level, l.s.Units.Kind == Buckets)
	switch {
	case blocked != "":
		why = blocked
	case c.few != "":
		why = c.few
	}
	if why != "" {
		r.because("interval", why)
		return
	}
	r.Interval = &[2]float64{lo, hi}
}

// readAnytime takes the sequence a step on, if units have been added, and reads its
// interval off.
func (l *ledger) readAnytime(T int64, r *Reading, c *comparison, v *voice, blocked string) {
	gate := boundary.Gate{Error: v.seq.Config.Error}
	verdict := v.seq.Step(l.look(T, c, gate, 0, c.e.Start, blocked))
	if v.seq.Clock.Begun() && v.keep == nil {
		v.keep = c.keep
	}
	contrast := c.e.Contrast != NoContrast
	r.PNow.Has, r.PAnytime.Has = contrast, contrast
	r.Method, r.Error = v.seq.Config.Method.String(), round12(v.seq.Config.Error)
	if !verdict.Speaking {
		r.because("anytime", verdict.Why)
		if contrast {
			r.because("p_now", verdict.Why)
			if v.seq.Clock.Begun() && blocked == "" {
				r.PAnytime.Value = finite(verdict.PAnytime)
			} else {
				r.because("p_anytime", verdict.Why)
			}
		}
		return
	}
	lo, hi, why := c.set(verdict.Critical)
	if why != "" {
		r.because("anytime", why)
	} else {
		r.Anytime = &[2]float64{lo, hi}
	}
	if !contrast {
		return // there is no difference whose absence could be tested
	}
	r.PNow.Value, r.PAnytime.Value = finite(verdict.PNow), finite(verdict.PAnytime)
	if verdict.HasE {
		r.EValue = finite(verdict.EValue)
	}
}

// round12 keeps 1 - 0.95 from being written as 0.050000000000000044.
func round12(x float64) float64 { return math.Round(x*1e12) / 1e12 }

// readProvisional adds the value over all units so far, where it is another.
func (l *ledger) readProvisional(r *Reading, estimate, arm, place int, v *voice) {
	if !l.provisionalDiffers(&l.s.Estimates[estimate], arm, place) {
		return
	}
	c := l.compare(estimate, arm, place, false, v)
	r.Provision = &Provisional{Value: finite(c.effect.Value()), StdError: finite(c.effect.StdError()), Units: c.counts}
	if c.single() {
		r.Provision.StdError = nil
	}
}

func (l *ledger) provisionalDiffers(e *Estimate, arm, place int) bool {
	if l.s.Units.Kind == EventsAlone {
		return false
	}
	arms := []int{arm}
	if e.Contrast != NoContrast {
		arms = append(arms, l.baseline)
	}
	return slices.ContainsFunc(arms, func(a int) bool {
		g := l.groups[groupKey{a, place}]
		return g.all.Units() != g.complete.Units()
	})
}
