package online

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"math"
	"strconv"
	"strings"

	"stillwell/online/boundary"
)

// A hearing is one comparison of one watch: its sequence, at the watch's own error, and
// what it has said last.
type hearing struct {
	seq    *boundary.Sequence
	state  string // of its last reading
	last   []byte
	raised string // the id of its alarm, once raised
}

type hearingKey struct {
	watch      int
	arm, place int
}

// States of a watch.
const (
	StateWaiting   = "waiting"   // the data do not bear its guarantee yet, or for the moment
	StateWatching  = "watching"  // evaluated at every step
	StateRaised    = "raised"    // it has crossed, for good
	StateWithdrawn = "withdrawn" // it had crossed, and its comparison has turned out unsound
)

// hear evaluates every watch that speaks about a segment.
func (l *ledger) hear(T int64, final bool, place int, out *Output) {
	for i := range l.s.Watches {
		w := &l.s.Watches[i]
		e := &l.s.Estimates[w.Estimate]
		share, about := l.shareOf(w, e, place)
		if !about {
			continue
		}
		for _, arm := range l.targets(e) {
			if l.groups[groupKey{arm, place}] == nil || e.Contrast != NoContrast && l.groups[groupKey{l.baseline, place}] == nil {
				continue
			}
			if h := l.hearings[hearingKey{i, arm, place}]; h == nil || h.last == nil || final || l.recheck || l.grown(e, arm, place) {
				l.hearOne(T, final, i, arm, place, share, out)
			}
		}
	}
}

// shareOf is the error of each comparison of a watch in a segment: shared among declared
// arms, and among listed segments, or, where any segment may come, by order of entry.
func (l *ledger) shareOf(w *Watch, e *Estimate, place int) (share float64, about bool) {
	comparisons := 1
	if e.Contrast != NoContrast {
		comparisons = max(1, len(l.s.Units.Arms)-1)
	} else if n := len(l.s.Units.Arms); n > 0 {
		comparisons = n
	}
	share = boundary.EqualShare(w.Error, comparisons)
	switch {
	case w.Any:
		if place == 0 {
			return 0, false
		}
		return boundary.SegmentShare(share, place), true
	case len(w.Segments) > 0:
		for _, name := range w.Segments {
			if place > 0 && strings.Join(l.values[place-1], "/") == name {
				return boundary.EqualShare(share, len(w.Segments)), true
			}
		}
		return 0, false
	}
	return share, place == 0
}

func (l *ledger) hearing(k hearingKey, share float64) *hearing {
	h, ok := l.hearings[k]
	if !ok {
		w := &l.s.Watches[k.watch]
		cfg := boundary.Config{Error: share, TuneFor: w.TuneFor}
		switch w.Against {
		case AtLeast:
			cfg.Side = boundary.Less
		case AtMost:
			cfg.Side = boundary.Greater
		}
		if w.Start > 0 {
			cfg.Method = boundary.Delayed
		}
		h = &hearing{seq: newSequence(cfg)}
		l.hearings[k] = h
	}
	return h
}

// equalShares tells whether the planned shares of two arms are equal.
func (l *ledger) equalShares(a, b int) bool {
	arms := l.s.Units.Arms
	return len(arms) > max(a, b) && arms[a].Share == arms[b].Share
}

func (l *ledger) hearOne(T int64, final bool, watch, arm, place int, share float64, out *Output) {
	w := &l.s.Watches[watch]
	e := &l.s.Estimates[w.Estimate]
	h := l.hearing(hearingKey{watch, arm, place}, share)
	v := l.voice(voiceKey{w.Estimate, arm, place})
	c := l.compare(w.Estimate, arm, place, true, v)
	gate := boundary.Gate{Error: share, OneSided: w.Against != Equal}
	gate.EqualShares = w.Against == Equal && w.Null == 0 && e.Contrast != NoContrast && l.equalShares(arm, l.baseline)
	blocked := l.blocked(e, place)
	verdict := h.seq.Step(l.look(T, c, gate, w.Null, w.Start, blocked))
	if h.seq.Clock.Begun() && v.keep == nil {
		v.keep = c.keep
	}
	r := l.watchReading(T, w, e, arm, place, h, c, verdict)
	switch {
	case verdict.Crossed && blocked != "":
		r.State = StateWithdrawn
	case verdict.Crossed:
		r.State = StateRaised
	case !verdict.Speaking:
		r.State = StateWaiting
	default:
		r.State = StateWatching
	}
	if h.state != r.State && (r.State == StateRaised || r.State == StateWithdrawn) {
		out.Alarms = append(out.Alarms, l.alarm(T, final, w, e, arm, place, h, r, v, out))
	}
	h.state = r.State
	c2 := *r
	c2.Time = ""
	line, err := AppendLine(nil, &c2)
	if err != nil {
		panic(err)
	}
	r.Final = final
	if final || !bytes.Equal(line, h.last) {
		out.Watches = append(out.Watches, *r)
	}
	h.last = line
}

func (l *ledger) watchReading(T int64, w *Watch, e *Estimate, arm, place int, h *hearing, c *comparison, verdict boundary.Verdict) *WatchReading {
	r := &WatchReading{Kind: "watch", Study: l.s.Name, Watch: w.Name, Estimate: e.Name, Segment: l.segment(place),
		Time: timeText(T), Method: h.seq.Config.Method.String(), Error: round12(h.seq.Config.Error)}
	if l.s.Units.Arm >= 0 {
		r.Arm = l.arms.list[arm]
	}
	why := verdict.Why
	if verdict.Speaking {
		var lo, hi float64
		if lo, hi, why = c.set(verdict.Critical); why == "" {
			r.Bound = &[2]*float64{finite(lo), finite(hi)}
			switch w.Against {
			case AtLeast:
				r.Bound[0] = nil
			case AtMost:
				r.Bound[1] = nil
			}
		}
	}
	if why != "" {
		r.Why = map[string]string{"bound": why}
	}
	if h.seq.Clock.Begun() {
		r.Evidence = evidence(h.seq.Config, verdict)
	}
	return r
}

// evidence is what the rule compares: the e-value with 1/error where there is one, else
// the running p-value with the error.
func evidence(cfg boundary.Config, v boundary.Verdict) *Evidence {
	if cfg.Method == boundary.Delayed {
		return &Evidence{PAnytime: finite(v.PAnytime), Threshold: round12(cfg.Error)}
	}
	ev := &Evidence{PAnytime: finite(v.PAnytime), Threshold: round12(1 / cfg.Error)}
	if v.HasE {
		ev.EValue = finite(v.EValue)
	}
	return ev
}

// alarm is what a watch raises, with the reading that raised it.
func (l *ledger) alarm(T int64, final bool, w *Watch, e *Estimate, arm, place int, h *hearing, r *WatchReading, v *voice, out *Output) Alarm {
	if h.raised == "" {
		h.raised = alarmID(l.s.Name, w.Name, r.Arm, r.Segment)
	}
	a := Alarm{Kind: "alarm", ID: h.raised, Study: l.s.Name, Watch: w.Name, State: r.State, Time: r.Time,
		Evidence: r.Evidence, Bound: r.Bound, AtAlarm: r.State == StateRaised, Final: final}
	if v.said != nil {
		reading := *v.said
		reading.AtAlarm = a.AtAlarm
		a.Reading = &reading
		if a.AtAlarm {
			markAtAlarm(out.Readings, v.said)
		}
	}
	a.Words = l.words(w, e, r)
	return a
}

// markAtAlarm marks the reading of this step that an alarm was raised on.
func markAtAlarm(readings []Reading, said *Reading) {
	for i := range readings {
		r := &readings[i]
		if r.Estimate == said.Estimate && r.Arm == said.Arm && r.Time == said.Time && fmt.Sprint(r.Segment) == fmt.Sprint(said.Segment) {
			r.AtAlarm = true
		}
	}
}

// alarmID is the same whenever the same comparison of the same watch is raised.
func alarmID(parts ...any) string {
	h := sha256.New()
	for _, p := range parts {
		fmt.Fprintf(h, "%v\x00", p)
	}
	return hex.EncodeToString(h.Sum(nil)[:12])
}

// words say in one sentence what the alarm claims.
func (l *ledger) words(w *Watch, e *Estimate, r *WatchReading) string {
	what := e.Name
	if r.Arm != "" && e.Contrast != NoContrast {
		what += fmt.Sprintf(" of %s against %s", r.Arm, l.s.Units.Baseline)
	} else if r.Arm != "" {
		what += " of " + r.Arm
	}
	for _, p := range r.Segment {
		what += fmt.Sprintf(", %s %s", p.Field, p.Value)
	}
	chance := fmt.Sprintf("a rule that errs with chance at most %s at all looks together", percent(r.Error))
	null := strconv.FormatFloat(w.Null, 'g', 6, 64)
	switch {
	case r.State == StateWithdrawn:
		return fmt.Sprintf("The alarm on %s is withdrawn: its comparison is not sound.", what)
	case w.Against == AtLeast:
		return fmt.Sprintf("The data rule out that %s is %s or more, by %s.", what, null, chance)
	case w.Against == AtMost:
		return fmt.Sprintf("The data rule out that %s is %s or less, by %s.", what, null, chance)
	}
	return fmt.Sprintf("The data rule out that %s is %s, by %s.", what, null, chance)
}

func percent(p float64) string {
	return strconv.FormatFloat(math.Round(1e6*p)/1e4, 'g', -1, 64) + "%"
}
