package config

import (
	"fmt"
	"regexp"
	"strconv"
	"strings"

	"stillwell/online"
)

var watchKeys = keys("name", "on", "against", "error", "tune_for", "start", "segments").
	with("shift watches", "shift", "detect", "false_alarms", "baseline", "season").
	with("looks at fixed amounts of information", "looks", "spending").
	with("exact or bounded evidence", "bounds")

func (s *study) readWatches(n *node) {
	if n.kind != list || len(n.items) == 0 {
		s.fault(n, "watches is a list with at least one watch")
		return
	}
	named := map[string]int{}
	for _, item := range n.items {
		w, ok := s.readWatch(item)
		if !ok {
			continue
		}
		if line, again := named[w.Name]; again {
			s.fault(item, "a second watch is called `%s`; the first is in line %d", w.Name, line).ways("give it a name of its own")
		}
		named[w.Name] = item.place.line
		s.Watches = append(s.Watches, w)
	}
	s.inherit()
}

// readWatch reads one watch; ok is false if it has a fault that leaves nothing to name.
func (s *study) readWatch(n *node) (w online.Watch, ok bool) {
	if shift, _ := n.child("shift"); shift != nil {
		s.later(shift, "shift watches").ways("watch against a value: on, against, error")
		return w, false
	}
	o := s.open(n, "a watch", watchKeys)
	if o == nil {
		return w, false
	}
	ok = o.require("on", "the estimate it watches")
	e := s.watched(o.get("on"), &w)
	ok = o.require("against", "the null it tests, as in against: '== 0'") && ok
	ok = s.readNull(o.get("against"), &w) && ok && e != nil
	if o.require("error", "the chance of a false alarm that you accept, ever") {
		if x, fine := s.number(o.get("error"), "error", "a number above 0 and at most 0.5, as in 0.01",
			func(x float64) bool { return x > 0 && x <= 0.5 }); fine {
			w.Error = x
		}
	}
	if e != nil {
		w.Name = fmt.Sprintf("%s against %s %s", e.Name, w.Against, strconv.FormatFloat(w.Null, 'g', -1, 64))
		s.watchable(o.get("on"), e)
	}
	if v := o.get("name"); v != nil && s.name(v, "a watch", plainName, plainLetters) {
		w.Name = v.text
	}
	w.TuneFor, w.Start = s.readTuning(o, nil)
	s.readSegments(o, &w)
	return w, ok
}

// watched finds the estimate that a watch is on.
func (s *study) watched(n *node, w *online.Watch) *online.Estimate {
	on, ok := s.text(n, "on")
	if !ok {
		return nil
	}
	names := make([]string, len(s.Estimates))
	for i := range s.Estimates {
		if names[i] = s.Estimates[i].Name; names[i] == on {
			w.Estimate = i
			return &s.Estimates[i]
		}
	}
	s.fault(n, "this study has no estimate `%s`", on).near(on, names)
	return nil
}

// watchable refuses a watch where no valid one exists.
func (s *study) watchable(n *node, e *online.Estimate) {
	if !s.settled {
		return
	}
	if absent := maybeAbsent(e); absent != "" && !e.Present && e.Contrast == online.NoContrast {
		s.selective(n, "watch", absent)
	}
	if why, ways := neverAnytime(s.Study, e); why != "" {
		s.fault(n, "no valid watch exists on `%s`: %s", e.Name, why).ways(ways...)
		return
	}
	if s.Units.Arm >= 0 && len(s.Units.Arms) == 0 {
		s.fault(n, "a watch shares its error among the arms it speaks about, and how many the data will show is not known beforehand").
			ways("declare them with their planned shares: units.arms, as in arms: {current: 1, wide: 1}; others are then counted and kept out")
	}
}

var null = regexp.MustCompile(`^\s*(==|>=|<=)\s*(\S+)\s*$`)

const nullsAre = "'== x' (alarmed by either side), '>= x' (alarmed when the data rule out x and more), '<= x' (x and less), quoted"

// readNull reads what a watch tests: == 0, >= -0.01, <= 3.
func (s *study) readNull(n *node, w *online.Watch) bool {
	text, ok := s.text(n, "against")
	if !ok {
		return false
	}
	parts := null.FindStringSubmatch(text)
	if parts == nil {
		f := s.fault(n, "`%s` is no null to test", text).allow(nullsAre)
		if x, err := strconv.ParseFloat(strings.Trim(text, "<>=! "), 64); err == nil {
			f.ways(fmt.Sprintf("against: '%s %s'", nullSign(text), strconv.FormatFloat(x, 'g', -1, 64)))
		}
		return false
	}
	x, err := strconv.ParseFloat(parts[2], 64)
	if err != nil || x-x != 0 {
		s.fault(n, "`%s` is no finite number", parts[2]).allow(nullsAre)
		return false
	}
	w.Null = x
	w.Against = map[string]online.Side{"==": online.Equal, ">=": online.AtLeast, "<=": online.AtMost}[parts[1]]
	return true
}

// nullSign is the sign that was meant by another one.
func nullSign(text string) string {
	switch {
	case strings.Contains(text, ">"):
		return ">="
	case strings.Contains(text, "<"):
		return "<="
	}
	return "=="
}

func (s *study) readSegments(o *object, w *online.Watch) {
	n := o.get("segments")
	if n == nil {
		return
	}
	switch {
	case n.kind == scalar && n.text == "any":
		w.Any = true
	case n.kind == scalar:
		s.fault(n, "`%s` is no value of segments", n.text).near(n.text, []string{"any"}).allow("a list of segments, as in [web, app]")
		return
	default:
		w.Segments = s.list(n, "segments", s.text)
	}
	switch {
	case !s.settled:
	case len(s.Units.By) == 0:
		s.fault(o.key("segments"), "this study has no segments: `units.by` names no field")
	case len(s.Units.By) > 1 && n.kind == list:
		for _, item := range n.items {
			if item.kind == scalar && strings.Count(item.text, "/") < len(s.Units.By)-1 {
				s.fault(item, "`%s` is no segment: a segment of this study has a value for each field of `units.by`", item.text).
					allow(strings.Join(s.Units.ByNames, "/"))
			}
		}
	}
}
