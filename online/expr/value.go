// Package expr is Stillwell's one expression language, in its three uses:
// filters and values over an event's fields, scores over a unit's tallies, and
// estimates, which are smooth formulas of score means, with exact gradients.
//
// The grammar is the parser library's; the meaning is ours and stands here:
//
//   - A field that an event lacks (or that is null) is absent. A comparison with
//     something absent is absent; && and || follow Kleene's three values; a filter
//     that ends absent does not match, a value that ends absent is not tallied.
//   - A comparison between different types is false (also !=).
//   - a ?? b is b where a is absent.
//
// Further, over events:
//
//   - x in [p, q] is x == p || x == q, and x not in [p, q] is x != p && x != q.
//   - Texts compare by their bytes, true and false only by == and !=.
//   - A field that stands alone as a condition is false unless it is a bool.
//   - In arithmetic a condition such as ms > 800 counts 1 or 0; a bool that an event
//     brings, a text, an array or an object is of a wrong type. Absent goes before wrong type, and that before not finite. A
//     comparison with what is of a wrong type or not finite is false.
//
// And over tallies: all are numbers, a condition is 1 or 0, and an operation
// without a finite result is absent, so that ?? gives it a value too.
//
// Everything is compiled once; evaluation allocates nothing and is safe for
// concurrent use.
package expr

// Kind says what a Value holds.
type Kind uint8

const (
	Absent Kind = iota // missing from the event, or null
	Number
	Text
	Bool
	Other // an array or an object: present, but of no use in an expression
)

// A Value is one field of one event.
type Value struct {
	Kind Kind
	True bool    // for Bool
	Num  float64 // for Number; infinite where the text exceeds float64
	// Text is the decoded string for Text, and the raw JSON text for all other
	// kinds but Absent. It may alias the decoder's buffers: valid until the next record.
	Text []byte
}

// A Record holds an event's fields by slot; Fields gives the slots.
type Record []Value

// Uses says what a field is taken for; a decoder that must guess, as in CSV, goes
// by it, and a number of no AsNumber field need not be parsed.
type Uses uint8

const (
	AsNumber Uses = 1 << iota // arithmetic, or compared with a number or with another field
	AsText                    // compared with a text
	AsBool                    // a condition, or compared with true or false
)

// Fields are the event fields that anything names, in order of slot. The zero
// value is ready. Not for concurrent use while it grows.
type Fields struct {
	names []string
	uses  []Uses
	slots map[string]int
}

// Slot returns the slot of a field, named by its dotted path, and adds it if new.
func (f *Fields) Slot(path string) int { return f.Use(path, 0) }

// Use is Slot, and adds to what the field is taken for.
func (f *Fields) Use(path string, how Uses) int {
	s, ok := f.slots[path]
	if !ok {
		if f.slots == nil {
			f.slots = map[string]int{}
		}
		s = len(f.names)
		f.slots[path] = s
		f.names = append(f.names, path)
		f.uses = append(f.uses, 0)
	}
	f.uses[s] |= how
	return s
}

// Names lists the fields by slot; the caller must not change it.
func (f *Fields) Names() []string { return f.names }

// Uses says what the field in a slot is taken for by all that names it.
func (f *Fields) Uses(slot int) Uses { return f.uses[slot] }
