package expr

import "slices"

// A Filter is a compiled condition on one event.
type Filter struct {
	cond  func(Record) tri
	slots []int
}

// ParseFilter compiles a condition, such as type == "ticket" && ms > 800, and
// gives the fields it names their slots. On faults it returns Errors and leaves
// the fields as they were.
func ParseFilter(src string, f *Fields) (*Filter, error) {
	s, tree := parse(src)
	c := &checker{source: s, level: overEvent}
	if tree == nil {
		return nil, c.faults.sorted()
	}
	x := c.condition(tree)
	if len(c.faults) > 0 {
		return nil, c.faults.sorted()
	}
	use(x, AsBool, f)
	return &Filter{cond: condition(x), slots: slotsOf(x)}, nil
}

// Match says whether the condition holds for an event: absent is no match. The
// record has all slots that the fields had when the filter was parsed.
func (f *Filter) Match(r Record) bool { return f.cond(r) == yes }

// Slots are the fields the filter looks at, in ascending order; the caller must
// not change them.
func (f *Filter) Slots() []int { return f.slots }

// use gives the fields below a node their slots, and notes what a field that
// stands there is taken for.
func use(n *node, as Uses, f *Fields) {
	switch n.op {
	case opField:
		n.slot = f.Use(n.name, as)
	case opElse:
		if n.typ != unknown {
			as = comparedWith(n.typ)
		}
		use(n.args[0], as, f)
		use(n.args[1], as, f)
	case opNot, opAnd, opOr:
		for _, a := range n.args {
			use(a, AsBool, f)
		}
	case opCompare:
		l, r := n.args[0], n.args[1]
		use(l, comparedWith(r.typ), f)
		use(r, comparedWith(l.typ), f)
	case opIn, opNotIn:
		if len(n.texts) > 0 {
			use(n.args[0], AsText, f)
		} else {
			use(n.args[0], AsNumber, f)
		}
	default:
		for _, a := range n.args {
			use(a, AsNumber, f)
		}
	}
}

func comparedWith(t typ) Uses {
	switch t {
	case text:
		return AsText
	case truth:
		return AsBool
	}
	return AsNumber // also for another field: numbers can be compared only if both are read
}

func slotsOf(n *node) []int {
	var slots []int
	n.walk(func(x *node) {
		if x.op == opField {
			slots = append(slots, x.slot)
		}
	})
	slices.Sort(slots)
	return slices.Compact(slots)
}
