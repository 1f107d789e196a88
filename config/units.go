package config

import (
	"slices"
	"time"

	"stillwell/online"
)

const defaultAgain = 90 * day

var unitKeys = keys("key", "every", "events", "entry", "arm", "baseline", "arms", "conflict", "follow_up",
	"from", "until", "again", "by")

func (s *study) readUnits(n *node) {
	u := &s.Units
	*u = online.Units{Arm: -1, From: online.NoTime, Until: online.NoTime, Again: defaultAgain}
	before := len(s.faults)
	o := s.open(n, "units", unitKeys)
	if o == nil {
		return
	}
	s.units = o
	kind := o.oneOf("who the independent unit is: whoever a field names (key), time buckets (every), "+
		"or each event alone, if you assert that events are independent (events: independent)", "key", "every", "events")
	switch kind {
	case "key":
		s.readKeyed(o)
	case "every":
		u.Kind = online.Buckets
		u.Every = s.duration(o.get("every"), "units.every", time.Second, time.Minute)
		o.refuse("a time bucket takes in all events of its time; nobody is admitted to it and nobody put it in an arm",
			"entry", "arm", "baseline", "arms", "conflict", "follow_up", "again")
		o.refuse("a time bucket has no entry event whose fields could tell segments apart; write a study for each", "by")
	case "events":
		u.Kind = online.EventsAlone
		s.choice(o.get("events"), "units.events", "", "independent")
		o.refuse("an arm is given to someone, whose events then share it and much else; who that is, is the unit (units.key)",
			"arm", "baseline", "arms", "conflict")
		o.refuse("an event that is a unit is complete at its own time", "follow_up", "again")
		u.Entry, s.written.entry = s.filter(o.get("entry"), "units.entry")
		s.readBy(o)
	}
	u.From = s.instant(o.get("from"), "units.from", online.NoTime)
	u.Until = s.instant(o.get("until"), "units.until", online.NoTime)
	if u.From != online.NoTime && u.Until != online.NoTime && u.From >= u.Until {
		s.fault(o.get("until"), "units.until is not later than units.from, so that no unit could enter")
	}
	s.settled = kind != "" && len(s.faults) == before
}

func (s *study) readKeyed(o *object) {
	u := &s.Units
	if field, ok := s.field(o.get("key"), "units.key"); ok {
		u.Key = s.plan.Fields.Slot(field)
	}
	u.Entry, s.written.entry = s.filter(o.get("entry"), "units.entry")
	s.readArms(o)
	u.FollowUp = s.duration(o.get("follow_up"), "units.follow_up", moment, 0)
	if again, ok := s.text(o.get("again"), "units.again"); ok {
		if u.Never = again == "never"; !u.Never {
			u.Again = s.duration(o.get("again"), "units.again", moment, defaultAgain)
		}
		if !o.has("follow_up") {
			s.fault(o.key("again"), "`again` counts from completion, and without `follow_up` no unit is ever complete").
				ways("give `follow_up`", "leave `again` away")
		}
	}
	s.readBy(o)
}

// readArms reads the groups that are compared.
func (s *study) readArms(o *object) {
	u := &s.Units
	if !o.has("arm") {
		o.refuse("it is about arms, and no `arm` says which field of the entry event names them", "baseline", "arms", "conflict")
		return
	}
	if field, ok := s.field(o.get("arm"), "units.arm"); ok {
		u.Arm = s.plan.Fields.Slot(field)
	}
	if v := o.get("arms"); v != nil {
		s.entries(v, "units.arms", func(key, value *node) {
			share, ok := s.number(value, "the share of arm `"+key.text+"`", "a number above 0, in any measure that the arms have in common",
				func(x float64) bool { return x > 0 })
			if !ok {
				share = 1
			}
			u.Arms = append(u.Arms, online.Arm{Name: key.text, Share: share})
		})
		if v.kind == mapping && len(v.entries) == 1 {
			s.fault(o.key("arms"), "one arm alone has nothing to be compared with").ways("declare the others", "leave `arm`, `arms` and `baseline` away")
		}
	}
	if baseline, ok := s.text(o.get("baseline"), "units.baseline"); ok {
		u.Baseline = baseline
		if names := armNames(u.Arms); len(names) > 0 && !slices.Contains(names, baseline) {
			s.fault(o.get("baseline"), "the baseline `%s` is none of the declared arms", baseline).near(baseline, names)
		}
	}
	u.Leave = s.choice(o.get("conflict"), "units.conflict", "first", "first", "leave") == "leave"
}

func armNames(arms []online.Arm) []string {
	names := make([]string, len(arms))
	for i, a := range arms {
		names[i] = a.Name
	}
	return names
}

func (s *study) readBy(o *object) {
	n := o.get("by")
	if n == nil {
		return
	}
	s.Units.ByNames = s.list(n, "units.by", func(item *node, what string) (string, bool) {
		name, ok := s.field(item, what)
		if ok && s.plan.Fields.Slot(name) == s.Units.Arm {
			s.fault(item, "`%s` names the arm; a segment of it would hold one arm only, with nothing to compare", name)
		}
		return name, ok
	})
	for _, name := range s.Units.ByNames {
		s.Units.By = append(s.Units.By, s.plan.Fields.Slot(name))
	}
}
