package online

import (
	"bytes"

	"stillwell/online/boundary"
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
