package expr

// Status says what became of an operand at an event.
type Status uint8

// Where several befall the parts of an operand, the first in this order that is
// not Present is told.
const (
	Present   Status = iota
	Missing          // a field is absent and not given by ??
	WrongType        // a text, an array or an object where a number is needed
	NotFinite        // no finite result
)

func (s Status) String() string {
	return [...]string{"present", "missing", "wrong type", "not finite"}[s]
}

// An Operand is a compiled number of one event.
type Operand struct {
	eval  quantity
	field int // slot of a bare field, else -1
	slots []int
}

// quantity evaluates to a number; the number counts only when it is present.
type quantity = func(Record) (float64, Status)

// ParseValue compiles what a tally takes of an event, such as amount * 2, and
// gives the fields it names their slots. A condition counts 1 or 0. On faults it
// returns Errors and leaves the fields as they were.
func ParseValue(src string, f *Fields) (*Operand, error) {
	s, tree := parse(src)
	c := &checker{source: s, level: overEvent}
	if tree == nil {
		return nil, c.faults.sorted()
	}
	x := c.expr(tree)
	if x.typ == text {
		c.at(tree, "a text cannot be tallied; a tally takes a number or a condition")
	}
	if len(c.faults) > 0 {
		return nil, c.faults.sorted()
	}
	use(x, AsNumber, f)
	o := &Operand{eval: quantityOf(x), field: -1, slots: slotsOf(x)}
	if x.op == opField {
		o.field = x.slot
	}
	return o, nil
}

// Eval returns the operand's value at an event: v is finite if s is Present, and
// 0 otherwise. The record has all slots that the fields had when it was parsed.
func (o *Operand) Eval(r Record) (v float64, s Status) { return o.eval(r) }

// Field returns the slot if the operand is a bare field.
func (o *Operand) Field() (slot int, ok bool) { return max(o.field, 0), o.field >= 0 }

// Slots are the fields the operand looks at, in ascending order; the caller must
// not change them.
func (o *Operand) Slots() []int { return o.slots }

// quantityOf compiles a node as a number.
func quantityOf(n *node) quantity {
	switch {
	case n.op == opNum:
		v := n.num
		return func(Record) (float64, Status) { return v, Present }
	case n.op == opField:
		slot := n.slot
		return func(r Record) (float64, Status) { return r[slot].quantity() }
	case n.op == opElse:
		a, b := quantityOf(n.args[0]), quantityOf(n.args[1])
		return func(r Record) (float64, Status) {
			if v, s := a(r); s != Missing {
				return v, s
			}
			return b(r)
		}
	case n.op.takesOne():
		f, a := arith1[n.op], quantityOf(n.args[0])
		return func(r Record) (float64, Status) {
			x, s := a(r)
			if s != Present {
				return 0, s
			}
			return present(f(x))
		}
	case n.op.takesTwo():
		f, a, b := arith2[n.op], quantityOf(n.args[0]), quantityOf(n.args[1])
		return func(r Record) (float64, Status) {
			x, s := a(r)
			y, t := b(r)
			if s != Present || t != Present {
				return 0, worse(s, t)
			}
			return present(f(x, y))
		}
	}
	c := condition(n)
	return func(r Record) (float64, Status) {
		switch c(r) {
		case yes:
			return 1, Present
		case no:
			return 0, Present
		}
		return 0, Missing
	}
}

// quantity reads a field as a number.
func (v *Value) quantity() (float64, Status) {
	switch v.Kind {
	case Absent:
		return 0, Missing
	case Number:
		return present(v.Num)
	}
	return 0, WrongType
}

func present(x float64) (float64, Status) {
	if !finite(x) {
		return 0, NotFinite
	}
	return x, Present
}

// worse is what is told of two parts that are not both present.
func worse(s, t Status) Status {
	if s == Present || t != Present && t < s {
		return t
	}
	return s
}

// value compiles a node as one side of a comparison. What has no right type or no
// finite result is Other, which compares with nothing.
func value(n *node) func(Record) Value {
	switch {
	case n.op == opText:
		v := Value{Kind: Text, Text: []byte(n.name)}
		return func(Record) Value { return v }
	case n.op == opField:
		slot := n.slot
		return func(r Record) Value { return r[slot] }
	case n.op == opElse:
		a, b := value(n.args[0]), value(n.args[1])
		return func(r Record) Value {
			if v := a(r); v.Kind != Absent {
				return v
			}
			return b(r)
		}
	case n.typ == truth:
		c := condition(n)
		return func(r Record) Value {
			if t := c(r); t != maybe {
				return Value{Kind: Bool, True: t == yes}
			}
			return Value{}
		}
	}
	q := quantityOf(n)
	return func(r Record) Value {
		switch v, s := q(r); s {
		case Present:
			return Value{Kind: Number, Num: v}
		case Missing:
			return Value{}
		}
		return Value{Kind: Other}
	}
}
