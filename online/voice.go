package online

import (
	"bytes"
	"math"
	"slices"

	"stillwell/online/adjust"
	"stillwell/online/boundary"
	"stillwell/online/influence"
)

// A voice is one comparison of one estimate: what it has said last, and where its
// sequence stands.
type voice struct {
	seq  *boundary.Sequence // nil where the estimate has no anytime interval
	keep []int              // covariates in use, fixed once a sequence has begun
	last []byte             // the last reading as written, without time and provisional part
	said *Reading           // the last reading in full
}

type voiceKey struct {
	estimate   int
	arm, place int
}

func (l *ledger) startSpeaking() {
	l.voices = map[voiceKey]*voice{}
	l.hearings = map[hearingKey]*hearing{}
	l.baseline = -1
	if b := l.s.Units.Baseline; b != "" {
		l.baseline, _ = l.arms.find([]byte(b))
	}
}

func (l *ledger) voice(k voiceKey) *voice {
	v, ok := l.voices[k]
	if !ok {
		v = &voice{}
		if e := &l.s.Estimates[k.estimate]; l.whyNoAnytime(e) == "" {
			cfg := boundary.Config{Error: 1 - l.plan.Level, TuneFor: e.TuneFor}
			if e.Start > 0 {
				cfg.Method = boundary.Delayed
			}
			v.seq = newSequence(cfg)
		}
		l.voices[k] = v
	}
	return v
}

// newSequence makes a sequence of a configuration that was checked with the file.
func newSequence(cfg boundary.Config) *boundary.Sequence {
	s, err := boundary.NewSequence(cfg)
	if err != nil {
		panic(err)
	}
	return &s
}

// whyNoAnytime says why an estimate can have no interval for all looks, whatever the data.
func (l *ledger) whyNoAnytime(e *Estimate) string {
	u := &l.s.Units
	switch {
	case u.Kind == Keyed && u.FollowUp == 0:
		return "without follow_up no unit is ever complete, and totals that still grow have no interval for all looks; give follow_up"
	case e.Window > 0:
		return "what a sliding window estimates moves, so no interval holds at all looks"
	case u.Kind == Buckets:
		return ""
	}
	return ""
}

// evaluate says what there is to say at the end of a step.
func (l *ledger) evaluate(T int64, final bool, out *Output) {
	for _, g := range l.groups {
		for _, w := range g.windows {
			g.slid = w.slide(T) || g.slid
		}
		g.unsaved = g.unsaved || g.slid
	}
	l.checkAllocation(T, final, out)
	l.recheck, l.narrowed = l.recheck || l.narrowed, false
	for place := range len(l.places.list) + 1 {
		if !l.stirred(place) && !final {
			continue
		}
		for e := range l.s.Estimates {
			l.evaluateEstimate(T, final, e, place, out)
		}
		l.hear(T, final, place, out)
	}
	for _, g := range l.groups {
		g.grown, g.moved, g.slid = false, false, false
	}
}

// stirred tells whether anything in a segment has changed in this step.
func (l *ledger) stirred(place int) bool {
	for arm := range l.arms.list {
		if g, ok := l.groups[groupKey{arm, place}]; ok && (g.grown || g.moved || g.slid) {
			return true
		}
	}
	return l.recheck
}

// targets are the arms that an estimate has a reading for.
func (l *ledger) targets(e *Estimate) []int {
	var out []int
	for arm := range l.arms.list {
		if e.Contrast == NoContrast || arm != l.baseline {
			out = append(out, arm)
		}
	}
	return out
}

func (l *ledger) evaluateEstimate(T int64, final bool, estimate, place int, out *Output) {
	e := &l.s.Estimates[estimate]
	for _, arm := range l.targets(e) {
		if l.groups[groupKey{arm, place}] == nil || e.Contrast != NoContrast && l.groups[groupKey{l.baseline, place}] == nil {
			continue
		}
		v := l.voice(voiceKey{estimate, arm, place})
		if v.last != nil && !final && !l.recheck && !l.grown(e, arm, place) {
			if v.said == nil { // restored from a checkpoint
				v.said = l.asBefore(T, estimate, arm, place, v)
			}
			r := l.again(T, estimate, arm, place, v)
			out.Latest = append(out.Latest, *r)
			continue
		}
		r := l.read(T, estimate, arm, place, v)
		r.Final = final
		line := essence(r)
		if final || !bytes.Equal(line, v.last) {
			out.Readings = append(out.Readings, *r)
		}
		v.last, v.said = line, r
		out.Latest = append(out.Latest, *r)
	}
}

// grown tells whether anything that a reading rests on has changed, but for its provisional part.
func (l *ledger) grown(e *Estimate, arm, place int) bool {
	if l.s.Units.Kind == Keyed && l.s.Units.FollowUp == 0 {
		return true
	}
	for other := range l.arms.list {
		about := other == arm || e.Contrast != NoContrast && other == l.baseline || len(e.Adjust) > 0
		if g := l.groups[groupKey{other, place}]; about && g != nil && (g.grown || g.slid) {
			return true
		}
	}
	return false
}

// asBefore makes the reading of a comparison that has not changed, without taking its
// sequence a step on.
func (l *ledger) asBefore(T int64, estimate, arm, place int, v *voice) *Reading {
	kept := *v
	if v.seq != nil {
		seq := *v.seq
		v.seq = &seq
	}
	r := l.read(T, estimate, arm, place, v)
	*v = kept
	return r
}

// again is the last reading with a new time and provisional part.
func (l *ledger) again(T int64, estimate, arm, place int, v *voice) *Reading {
	r := *v.said
	r.Time, r.Provision, r.Final, r.AtAlarm = timeText(T), nil, false, false
	if l.s.Estimates[estimate].Window == 0 {
		l.readProvisional(&r, estimate, arm, place, v)
	}
	v.said = &r
	return &r
}

// essence is what of a reading makes it new: all but its time, its provisional part, and
// whether it is a last view.
func essence(r *Reading) []byte {
	c := *r
	c.Time, c.Provision, c.Final = "", nil, false
	b, err := AppendLine(nil, &c)
	if err != nil {
		panic(err) // numbers that JSON cannot hold are left out when a reading is made
	}
	return b
}

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
		c.thin(complete, arms)
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

// Latest is every reading, and what every watch says, as of the last step, for those who came
// after it was said: after a restart, say. Nothing moves by it.
func (d *Desk) Latest(T int64) Output {
	out := Output{Time: T}
	for _, l := range d.studies {
		heard := map[hearingKey]hearing{}
		for k, h := range l.hearings {
			heard[k] = *h
			seq := *h.seq
			h.seq, h.last = &seq, nil
		}
		for place := range len(l.places.list) + 1 {
			for e := range l.s.Estimates {
				l.evaluateEstimate(T, false, e, place, &out)
			}
			l.hear(T, false, place, &out)
		}
		for k, h := range heard {
			*l.hearings[k] = h
		}
	}
	return Output{Time: T, Latest: out.Latest, Watches: out.Watches}
}
