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

// Fields are the event fields that anything names, in order of slot. The zero
// value is ready. Not for concurrent use while it grows.
type Fields struct {
	names []string
	slots map[string]int
}

// Slot returns the slot of a field, named by its dotted path, and adds it if new.
func (f *Fields) Slot(path string) int {
	if s, ok := f.slots[path]; ok {
		return s
	}
	if f.slots == nil {
		f.slots = map[string]int{}
	}
	s := len(f.names)
	f.slots[path] = s
	f.names = append(f.names, path)
	return s
}

// Names lists the fields by slot; the caller must not change it.
func (f *Fields) Names() []string { return f.names }
