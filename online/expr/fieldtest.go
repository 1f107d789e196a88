package expr

import "bytes"

// A fieldTest compares one field with a constant. Nearly all filters are one of
// these or several joined by &&, and these are evaluated without a call to a
// closure each.
type fieldTest struct {
	slot  int
	kind  Kind     // the test is no if the field is of another
	holds relation // for Number and Text; for Bool the field itself is the answer
	num   float64
	text  string
	bytes []byte
}

var isEqual = comparison["=="]

// fieldTests returns the tests that a node is the conjunction of, nil if it is
// anything else.
func fieldTests(n *node) []fieldTest {
	switch n.op {
	case opField:
		return []fieldTest{{slot: n.slot, kind: Bool}}
	case opAnd:
		l, r := fieldTests(n.args[0]), fieldTests(n.args[1])
		if l == nil || r == nil {
			return nil
		}
		return append(l, r...)
	case opCompare:
		l, r, holds := n.args[0], n.args[1], n.holds
		if r.op == opField {
			l, r, holds = r, l, holds.mirrored()
		}
		switch {
		case l.op == opField && r.op == opText:
			return []fieldTest{{slot: l.slot, kind: Text, holds: holds, text: r.name, bytes: []byte(r.name)}}
		case l.op == opField && r.op == opNum:
			return []fieldTest{{slot: l.slot, kind: Number, holds: holds, num: r.num}}
		}
	}
	return nil
}

func (t *fieldTest) of(r Record) tri {
	v := &r[t.slot]
	if v.Kind != t.kind {
		return absentOrNo(v.Kind)
	}
	switch {
	case t.kind == Number:
		return triOf(t.holds&relate(v.Num, t.num) != 0)
	case t.kind == Bool:
		return triOf(v.True)
	case t.holds == isEqual: // quicker than the order of the texts
		return triOf(string(v.Text) == t.text)
	}
	return triOf(t.holds&relateBytes(v.Text, t.bytes) != 0)
}

// allOf is the conjunction of tests.
func allOf(tests []fieldTest, r Record) tri {
	all := yes
	for i := range tests {
		v := tests[i].of(r)
		if v == no {
			return no
		}
		all = min(all, v)
	}
	return all
}

func relateBytes(a, b []byte) relation { return less << (bytes.Compare(a, b) + 1) }
