package expr

import "slices"

// tri is a truth of Kleene's logic, ordered so that && is the lesser of two, ||
// the greater, and ! the distance from yes.
type tri uint8

const (
	no tri = iota
	maybe
	yes
)

func triOf(b bool) tri {
	if b {
		return yes
	}
	return no
}

// condition compiles a node as a condition.
func condition(n *node) func(Record) tri {
	if tests := fieldTests(n); len(tests) == 1 {
		return tests[0].of
	} else if tests != nil {
		return func(r Record) tri { return allOf(tests, r) }
	}
	switch n.op {
	case opBool:
		v := triOf(n.num == 1)
		return func(Record) tri { return v }
	case opNot:
		a := condition(n.args[0])
		return func(r Record) tri { return yes - a(r) }
	case opAnd:
		a, b := condition(n.args[0]), condition(n.args[1])
		return func(r Record) tri {
			v := a(r)
			if v == no {
				return no
			}
			return min(v, b(r))
		}
	case opOr:
		a, b := condition(n.args[0]), condition(n.args[1])
		return func(r Record) tri {
			v := a(r)
			if v == yes {
				return yes
			}
			return max(v, b(r))
		}
	case opElse:
		a, b := condition(n.args[0]), condition(n.args[1])
		return func(r Record) tri {
			if v := a(r); v != maybe {
				return v
			}
			return b(r)
		}
	case opIn, opNotIn:
		return membership(n)
	}
	return compare(n)
}

// compare compiles a comparison of any sides.
func compare(n *node) func(Record) tri {
	a, b, holds := value(n.args[0]), value(n.args[1]), n.holds
	return func(rec Record) tri {
		x, y := a(rec), b(rec)
		if x.Kind == Absent || y.Kind == Absent {
			return maybe
		}
		return triOf(holds&relateValues(&x, &y) != 0)
	}
}

func absentOrNo(k Kind) tri {
	if k == Absent {
		return maybe
	}
	return no
}

// relateValues is none for values of different kinds, and for arrays and objects.
func relateValues(x, y *Value) relation {
	switch {
	case x.Kind != y.Kind:
		return 0
	case x.Kind == Number:
		return relate(x.Num, y.Num)
	case x.Kind == Text:
		return relateBytes(x.Text, y.Text)
	case x.Kind == Bool && x.True == y.True:
		return same
	case x.Kind == Bool:
		return apart
	}
	return 0
}

// membership compiles in and not in.
func membership(n *node) func(Record) tri {
	a, kind := value(n.args[0]), Number
	if len(n.texts) > 0 {
		kind = Text
	}
	found, elsewhere := yes, no
	if n.op == opNotIn {
		found, elsewhere = no, yes
	}
	nums, texts := n.nums, textSetOf(n.texts)
	return func(r Record) tri {
		v := a(r)
		switch {
		case v.Kind != kind, v.Num != v.Num:
			return absentOrNo(v.Kind)
		case kind == Number && slices.Contains(nums, v.Num), kind == Text && texts.has(v.Text):
			return found
		}
		return elsewhere
	}
}
