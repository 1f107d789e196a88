package online

import (
	"math"
	"strings"

	"stillwell/online/allocation"
	"stillwell/online/boundary"
	"stillwell/online/wire"
)

// checks are a study's allocation checks: whether arms got units in the planned shares, in
// four respects for everyone, and in one for each segment.
type checks struct {
	plan     []string // arms
	shares   []float64
	everyone []*allocation.Check // in the order of respects; nil without planned shares
	segments []*allocation.Check // by place, from 1
}

var respects = [...]string{"units entered", "units complete", "units seen in two arms", "units with late events"}

func (l *ledger) newChecks() checks {
	var c checks
	if len(l.s.Units.Arms) < 2 || l.s.Units.Kind != Keyed {
		return c
	}
	for _, a := range l.s.Units.Arms {
		c.plan, c.shares = append(c.plan, a.Name), append(c.shares, a.Share)
	}
	for _, what := range respects {
		c.everyone = append(c.everyone, c.check(what, 0))
	}
	return c
}

func (c *checks) check(what string, err float64) *allocation.Check {
	k, e := allocation.New(allocation.Plan{What: what, Arms: c.plan, Shares: c.shares, Error: err})
	if e != nil {
		panic(e) // names and shares were checked with the file
	}
	return k
}

// segment is the check of a segment; they share one error by order of entry.
func (c *checks) segment(place int, what string) *allocation.Check {
	for len(c.segments) < place {
		c.segments = append(c.segments, c.check(what, boundary.SegmentShare(allocation.Error, len(c.segments)+1)))
	}
	return c.segments[place-1]
}

// checkAllocation takes every check a step on, and raises an alarm for one that blocks.
func (l *ledger) checkAllocation(T int64, final bool, out *Output) {
	l.recheck = false
	if l.checks.everyone == nil {
		return
	}
	arms := len(l.s.Units.Arms)
	for i, check := range l.checks.everyone {
		counts := make([]int64, arms)
		for arm := range arms {
			c := l.counts[arm]
			counts[arm] = [...]int64{c.Entered, l.completeIn(arm, 0), c.Conflicted, c.Late}[i]
		}
		l.stepCheck(T, final, check, respects[i], nil, counts, out)
	}
	for place := 1; place <= len(l.places.list); place++ {
		counts := make([]int64, arms)
		for arm := range arms {
			if g := l.groups[groupKey{arm, place}]; g != nil {
				counts[arm] = g.all.Units()
			}
		}
		seg := l.segment(place)
		l.stepCheck(T, final, l.checks.segment(place, "units of "+segmentText(seg)), "units entered", seg, counts, out)
	}
}

func segmentText(seg Segment) string {
	var parts []string
	for _, p := range seg {
		parts = append(parts, p.Field+" "+p.Value)
	}
	return strings.Join(parts, ", ")
}

func (l *ledger) completeIn(arm, place int) int64 {
	if g := l.groups[groupKey{arm, place}]; g != nil {
		return g.complete.Units()
	}
	return 0
}

func (l *ledger) stepCheck(T int64, final bool, check *allocation.Check, what string, seg Segment, counts []int64, out *Output) {
	if check.Blocked {
		return
	}
	why := check.Step(counts)
	if why == "" {
		return
	}
	l.recheck = true
	name := "allocation: " + what
	if len(seg) > 0 {
		name += ", " + segmentText(seg)
	}
	e := math.Min(math.Exp(check.MaxLogE), math.MaxFloat64)
	out.Alarms = append(out.Alarms, Alarm{Kind: "alarm", ID: alarmID(l.s.Name, name), Study: l.s.Name, Watch: name,
		State: StateRaised, Time: timeText(T), Final: final, Evidence: &Evidence{EValue: &e, Threshold: math.Round(1 / check.Error())},
		Words: "The arms did not get units as planned, so effects cannot be compared: " + why + "."})
}

// blocked says why a comparison is not sound, "" where nothing speaks against it.
func (l *ledger) blocked(e *Estimate, place int) string {
	if e.Contrast == NoContrast {
		return ""
	}
	for _, c := range l.checks.everyone {
		if c.Blocked {
			return "the arms did not get units as planned: " + c.Why()
		}
	}
	if place > 0 && place <= len(l.checks.segments) && l.checks.segments[place-1].Blocked {
		return "the arms did not get units as planned: " + l.checks.segments[place-1].Why()
	}
	return ""
}

func (l *ledger) encodeChecks(w *wire.Writer) {
	for _, c := range l.checks.everyone {
		b, _ := c.AppendBinary(nil) // never fails
		w.Bytes(b)
	}
	w.U64(uint64(len(l.checks.segments)))
	for _, c := range l.checks.segments {
		b, _ := c.AppendBinary(nil)
		w.Bytes(b)
	}
}

func (l *ledger) decodeChecks(r *wire.Reader) {
	read := func(what string, err float64) *allocation.Check {
		c, rest, e := allocation.Decode(allocation.Plan{What: what, Arms: l.checks.plan, Shares: l.checks.shares, Error: err}, r.Bytes())
		if e != nil || len(rest) > 0 {
			r.Fail("a check that cannot be: %v", e)
		}
		return c
	}
	for i, what := range respects {
		if l.checks.everyone != nil {
			l.checks.everyone[i] = read(what, 0)
		}
	}
	n := r.Count(1)
	if n > len(l.places.list) {
		r.Fail("%d checks of %d segments", n, len(l.places.list))
		return
	}
	for place := 1; place <= n && r.Err() == nil; place++ {
		l.checks.segments = append(l.checks.segments,
			read("units of "+segmentText(l.segment(place)), boundary.SegmentShare(allocation.Error, place)))
	}
}
