package config

import (
	"strings"

	"stillwell/online"
	"stillwell/online/expr"
)

// A study being read: what its parts must know of one another.
type study struct {
	*checker
	*online.Study
	plan    *online.Plan
	written written
	settled bool             // who the unit is has been read without fault
	units   *object          // nil if there is none to blame
	tallies map[string]*node // keys of the tallies that are there, right or wrong
}

// written are the expressions of a study as the file has them.
type written struct {
	entry   string
	tallies []tallyText // in the order of Tallies
}

type tallyText struct{ value, when string }

const (
	maxStudies = 200 // the state has one byte for a study, and one for a tally
	maxTallies = 200
)

var studyKeys = keys("name", "about", "units", "tallies", "estimates", "watches")

// study reads an entry of studies; name is its name's node, nil if it has none.
func (c *checker) study(n *node, p *online.Plan) (out online.Study, w written, name *node) {
	o := c.open(n, "a study", studyKeys)
	if o == nil {
		return out, w, nil
	}
	s := &study{checker: c, Study: &out, plan: p, tallies: map[string]*node{}}
	if o.require("name", "readings and alarms carry it") {
		if v := o.get("name"); v != nil && c.name(v, "a study", plainName, plainLetters) {
			out.Name, name = v.text, v
		}
	}
	out.About, _ = c.text(o.get("about"), "about")
	if o.require("units", "who the independent unit is decides every standard error") && o.get("units") != nil {
		s.readUnits(o.get("units"))
	}
	if o.require("tallies", "what is counted for each unit") && o.get("tallies") != nil {
		s.readTallies(o.get("tallies"))
	}
	if o.require("estimates", "what is estimated") && o.get("estimates") != nil {
		s.readEstimates(o.get("estimates"))
	}
	if v := o.get("watches"); v != nil {
		s.readWatches(v)
	}
	return out, s.written, name
}

// located reports the faults of an expression where they stand in the file.
func (c *checker) located(n *node, err error) {
	if faults, ok := err.(expr.Errors); ok {
		for _, e := range faults {
			c.within(n, e)
		}
		return
	}
	c.fault(n, "%s", err)
}

// filter compiles a condition on events; nil where there is none or it is wrong.
func (s *study) filter(n *node, what string) (*expr.Filter, string) {
	text, ok := s.text(n, what)
	if !ok {
		return nil, ""
	}
	f, err := expr.ParseFilter(text, s.plan.Fields)
	if err != nil {
		s.located(n, err)
		return nil, text
	}
	return f, text
}

// entries reads a mapping of names that the user chooses.
func (s *study) entries(n *node, what string, each func(key, value *node)) {
	if n.kind != mapping || len(n.entries) == 0 {
		s.fault(n, "%s is a mapping of names to what they stand for, with at least one", what)
		return
	}
	seen := map[string]int{}
	for _, e := range n.entries {
		if line, again := seen[e.key.text]; again {
			s.fault(e.key, "`%s` stands twice in %s, the first time in line %d", e.key.text, what, line)
			continue
		}
		seen[e.key.text] = e.key.place.line
		if e.value.kind == empty {
			s.fault(e.key, "`%s` has no value", e.key.text)
		}
		each(e.key, e.value)
	}
}

// canonical writes an expression's blanks, which mean nothing outside quotes, in one way.
func canonical(text string) string {
	var b strings.Builder
	quote, gap, escaped := rune(0), false, false
	for _, r := range strings.TrimSpace(text) {
		if quote == 0 && (r == ' ' || r == '\t' || r == '\n') {
			gap = true
			continue
		}
		if gap {
			b.WriteByte(' ')
			gap = false
		}
		b.WriteRune(r)
		switch {
		case escaped:
			escaped = false
		case quote == 0 && (r == '"' || r == '\'' || r == '`'):
			quote = r
		case r == '\\' && (quote == '"' || quote == '\''):
			escaped = true
		case r == quote:
			quote = 0
		}
	}
	return b.String()
}
