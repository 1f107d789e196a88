package config

import (
	"slices"

	"stillwell/online"
	"stillwell/online/expr"
)

var tallyKinds = map[string]online.TallyKind{
	"count": online.Count, "sum": online.SumOf, "min": online.Min, "max": online.Max,
	"first": online.First, "last": online.Last, "any": online.Any,
}

var tallyWords = []string{"count", "sum", "min", "max", "first", "last", "any"}

// startsAbsent: a unit without a matching event has no such tally.
func startsAbsent(k online.TallyKind) bool {
	return k == online.Min || k == online.Max || k == online.First || k == online.Last
}

// reserved are words that an expression understands otherwise.
var reserved = []string{"min", "max", "abs", "log", "exp", "sqrt", "mean", "field", "true", "false", "null", "nil", "in", "not", "and", "or"}

func (s *study) readTallies(n *node) {
	s.entries(n, "tallies", func(key, value *node) {
		s.tallies[key.text] = key
		if s.name(key, "a tally", identifier, identifierLetters) && slices.Contains(reserved, key.text) {
			s.fault(key, "`%s` means something else in an expression and cannot be the name of a tally", key.text)
		}
		t := online.Tally{Name: key.text}
		var text tallyText
		if value.kind != empty {
			s.readTally(value, &t, &text)
		}
		s.Tallies = append(s.Tallies, t)
		s.written.tallies = append(s.written.tallies, text)
	})
	if len(s.Tallies) > maxTallies {
		s.fault(n, "the study has %d tallies; it can have %d", len(s.Tallies), maxTallies)
	}
}

func (s *study) readTally(n *node, t *online.Tally, text *tallyText) {
	o := s.open(n, "tally `"+t.Name+"`", keys(append(slices.Clone(tallyWords), "when", "before")...))
	if o == nil {
		return
	}
	word := o.oneOf("what is kept of a unit's events", tallyWords...)
	t.Kind = tallyKinds[word]
	switch value := o.get(word); t.Kind {
	case online.Count, online.Any:
		t.When, text.when = s.filter(value, word)
		if word != "" && o.has("when") {
			s.fault(o.key("when"), "`%s` has its condition already", word).ways("join both conditions by &&")
		}
	default:
		if source, ok := s.text(value, word); ok {
			v, err := expr.ParseValue(source, s.plan.Fields)
			if err != nil {
				s.located(value, err)
			}
			t.Value, text.value = v, source
		}
		t.When, text.when = s.filter(o.get("when"), "when")
	}
	if v := o.get("before"); v != nil {
		s.readBefore(v, o, t)
	}
}

// readBefore reads the span before entry: a duration, or one with a grain.
func (s *study) readBefore(n *node, tally *object, t *online.Tally) {
	if n.kind == mapping {
		o := s.open(n, "before", keys("span", "grain"))
		if o == nil {
			return
		}
		o.require("span", "how long before entry events count")
		t.Before = s.duration(o.get("span"), "before.span", moment, moment)
		t.Grain = s.duration(o.get("grain"), "before.grain", moment, 0)
		if o.get("span") != nil && t.Grain > t.Before {
			s.fault(o.get("grain"), "the grain is longer than the span (%s) that it divides", FormatDuration(t.Before))
		}
	} else {
		t.Before = s.duration(n, "before", moment, moment)
	}
	at := tally.key("before")
	switch {
	case !s.settled:
	case s.Units.Kind != online.Keyed:
		s.fault(at, "only units with a key have a time before their entry")
	case s.written.entry == "":
		s.fault(at, "a unit enters with its first event, so that no event of it can lie before").
			ways("say which event admits a unit: units.entry", "leave `before` away")
	}
}
