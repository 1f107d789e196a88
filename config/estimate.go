package config

import (
	"slices"
	"time"

	"stillwell/online"
	"stillwell/online/expr"
)

var estimateKeys = keys("of", "contrast", "adjust", "among", "window", "tune_for", "start").
	with("seasons", "season")

func (s *study) readEstimates(n *node) {
	s.entries(n, "estimates", func(key, value *node) {
		s.name(key, "an estimate", plainName, plainLetters)
		e := online.Estimate{Name: key.text}
		if value.kind != empty {
			s.readEstimate(value, &e)
		}
		s.Estimates = append(s.Estimates, e)
	})
}

func (s *study) readEstimate(n *node, e *online.Estimate) {
	o := s.open(n, "estimate `"+e.Name+"`", estimateKeys)
	if o == nil {
		return
	}
	if o.require("of", "the formula of means, as in mean(fare) / mean(visits)") {
		s.readFormula(o.get("of"), e)
	}
	s.readContrast(o, e)
	e.Present = s.choice(o.get("among"), "among", "", "present") == "present"
	if absent := maybeAbsent(e); absent != "" && e.Contrast != online.NoContrast && !e.Present {
		s.selective(o.get("of"), "contrast", absent)
	}
	s.readAdjust(o, e)
	s.readWindow(o, e)
	e.TuneFor, e.Start = s.readTuning(o, e)
}

// readFormula compiles the formula over the study's tallies, those with faults of their own included.
func (s *study) readFormula(n *node, e *online.Estimate) {
	source, ok := s.text(n, "of")
	if !ok {
		return
	}
	tallies := make([]expr.Tally, len(s.Tallies))
	for i, t := range s.Tallies {
		tallies[i] = expr.Tally{
			Name:        t.Name,
			MayBeAbsent: startsAbsent(t.Kind),
			Binary:      t.Kind == online.Any,
			NonNegative: t.Kind == online.Any || t.Kind == online.Count,
		}
	}
	of, err := expr.ParseEstimate(source, tallies)
	if err != nil {
		s.located(n, err)
		return
	}
	e.Of, e.Source = of, source
}

// maybeAbsent is a score of the estimate that a unit may lack, "" if there is none.
func maybeAbsent(e *online.Estimate) string {
	if e.Of == nil {
		return ""
	}
	for _, score := range e.Of.Scores() {
		if score.MayBeAbsent() {
			return score.String()
		}
	}
	return ""
}

// operand writes a score so that ?? can follow it.
func operand(score string) string {
	if identifier.MatchString(score) {
		return score
	}
	return "(" + score + ")"
}

// selective refuses a comparison of units that are others in each arm.
func (s *study) selective(n *node, what, score string) {
	s.fault(n, "`%s` can be absent, and a %s of its mean compares only the units that have it, who may be others in each arm", score, what).
		ways("give the absent a value: mean("+operand(score)+" ?? 0)", "say that you mean those units: among: present; readings then show their share by arm")
}

func (s *study) readContrast(o *object, e *online.Estimate) {
	n := o.get("contrast")
	if n == nil {
		return
	}
	switch s.choice(n, "contrast", "", "difference", "relative") {
	case "difference":
		e.Contrast = online.Difference
	case "relative":
		e.Contrast = online.Relative
	}
	switch {
	case !s.settled:
	case s.Units.Arm < 0:
		f := s.fault(o.key("contrast"), "a contrast compares arms, and the units of this study have none")
		if s.Units.Kind == online.Keyed {
			f.ways("name the field of the entry event that says the arm: units.arm", "leave `contrast` away")
		} else {
			f.ways("leave `contrast` away")
		}
	case s.Units.Baseline == "" && !s.units.has("baseline"):
		s.fault(o.key("contrast"), "a contrast compares each arm with the baseline, and no `units.baseline` names it").
			ways("name it: units.baseline", "leave `contrast` away")
	}
}

// readWindow reads the span over which a moving estimate looks back.
func (s *study) readWindow(o *object, e *online.Estimate) {
	n := o.get("window")
	if n == nil {
		return
	}
	e.Window = s.duration(n, "window", moment, 0)
	if e.Window%s.plan.Every != 0 {
		s.fault(n, "a window slides by steps, and %s is no whole number of steps of %s (readings.every)",
			FormatDuration(e.Window), FormatDuration(s.plan.Every))
	}
	if s.settled && endless(&s.Units) {
		s.fault(o.key("window"), "a window holds the units that became complete in it, and without `units.follow_up` no unit ever does").
			ways("give units.follow_up", "use time buckets: units: {every: 5m}")
	}
}

// endless: units whose events never cease to count.
func endless(u *online.Units) bool { return u.Kind == online.Keyed && u.FollowUp == 0 }

// readTuning reads where a boundary is tightest, or that it starts late; e, if any,
// may have no boundary to tune.
func (s *study) readTuning(o *object, e *online.Estimate) (tuneFor float64, start time.Duration) {
	if x, ok := s.number(o.get("tune_for"), "tune_for", "a number of units above 0, of the compared arms together",
		func(x float64) bool { return x >= 1 && x <= 1e15 }); ok {
		tuneFor = x
	}
	start = s.duration(o.get("start"), "start", moment, 0)
	if o.has("tune_for") && o.has("start") {
		s.fault(o.key("start"), "`start` and `tune_for` choose different boundaries; one of them stands").
			ways("`tune_for`: tightest at that many units", "`start`: silent until then, tighter soon after")
	}
	if e == nil || !s.settled {
		return tuneFor, start
	}
	for _, key := range []string{"tune_for", "start"} {
		if why, _ := neverAnytime(s.Study, e); why != "" && o.has(key) {
			s.fault(o.key(key), "`%s` tunes an anytime interval, and there is none: %s", key, why)
		}
	}
	return tuneFor, start
}

// readAdjust reads the covariates. Only what was settled before a unit was put in
// its arm may adjust; anything later may be an effect of the arm.
func (s *study) readAdjust(o *object, e *online.Estimate) {
	n := o.get("adjust")
	if n == nil {
		return
	}
	if n.kind != list || len(n.items) == 0 {
		s.fault(n, "adjust is a list with at least one entry, as in [past_fare]")
		return
	}
	if !o.has("contrast") {
		s.fault(o.key("adjust"), "adjustment takes chance differences between arms out of a comparison, and this estimate compares nothing").
			ways("give it a contrast", "leave `adjust` away")
	}
	for _, item := range n.items {
		cov, ok := s.covariate(item)
		if ok && slices.ContainsFunc(e.Adjust, func(c online.Covariate) bool { return c.Name == cov.Name }) {
			s.fault(item, "`%s` stands twice in adjust", cov.Name)
			continue
		}
		if ok {
			e.Adjust = append(e.Adjust, cov)
		}
	}
}

// covariate reads one: a name, or {field: name} where the name is near a tally's.
func (s *study) covariate(n *node) (online.Covariate, bool) {
	if n.kind == mapping {
		o := s.open(n, "an entry of adjust", keys("field"))
		if o == nil || !o.require("field", "the field of the entry event") {
			return online.Covariate{}, false
		}
		name, ok := s.field(o.get("field"), "adjust")
		return s.fieldCovariate(o.get("field"), name, ok)
	}
	name, ok := s.text(n, "an entry of adjust")
	if !ok {
		return online.Covariate{}, false
	}
	var past []string
	for i, t := range s.Tallies {
		if t.Name == name && t.Before > 0 {
			return online.Covariate{Name: name, Tally: i, Field: -1}, true
		}
		if t.Before > 0 {
			past = append(past, t.Name)
		}
	}
	if s.tallies[name] != nil {
		s.fault(n, "tally `%s` counts events after entry, which the arm may have changed; adjusting for it would take the effect out", name).
			allow("tallies with `before`", "fields of the entry event").
			ways("give a tally over the past: "+name+"_before: {…, before: 14d}", "if the field of that name is meant: {field: "+name+"}")
		return online.Covariate{}, false
	}
	if meant := expr.Nearest(name, past); meant != "" {
		f := s.fault(n, "there is no tally `%s` over the time before entry", name).ways("if a field of the entry event is meant: {field: " + name + "}")
		f.Nearest = meant
		return online.Covariate{}, false
	}
	field, ok := s.field(n, "adjust")
	return s.fieldCovariate(n, field, ok)
}

func (s *study) fieldCovariate(n *node, name string, ok bool) (online.Covariate, bool) {
	if !ok {
		return online.Covariate{}, false
	}
	slot := s.plan.Fields.Use(name, expr.AsNumber)
	if slot == s.Units.Arm {
		s.fault(n, "`%s` names the arm itself; adjusting for it would take the effect out", name)
		return online.Covariate{}, false
	}
	return online.Covariate{Name: name, Tally: -1, Field: slot}, true
}

// inherit hands the tuning of an estimate's first watch to the estimate, and the
// estimate's to watches without one: an estimate has one boundary.
func (s *study) inherit() {
	for i := range s.Watches {
		w := &s.Watches[i]
		e := &s.Estimates[w.Estimate]
		if e.TuneFor == 0 && e.Start == 0 {
			e.TuneFor, e.Start = w.TuneFor, w.Start
		}
	}
	for i := range s.Watches {
		w := &s.Watches[i]
		if e := s.Estimates[w.Estimate]; w.TuneFor == 0 && w.Start == 0 {
			w.TuneFor, w.Start = e.TuneFor, e.Start
		}
	}
}
