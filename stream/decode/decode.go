// Package decode turns the bytes of one event, a line of JSON or a CSV record,
// into the fields that a study names.
//
// The whole line is checked, also where nothing of it is wanted: a line is an
// event or it is a fault, and never half an event. Decoding allocates nothing,
// for good lines and for bad ones.
//
//	SplitLines   a block of bytes to lines
//	JSON, CSV    a line to an expr.Record
//	ParseTime    a field to nanoseconds since 1970
package decode

import (
	"fmt"

	"stillwell/online/expr"
)

// A Field is one event field that is wanted.
type Field struct {
	Path    string // dotted path into nested objects; in CSV the column's name
	Numeric bool   // its value is used as a number somewhere
}

// A Decoder reads one event after another. Not for concurrent use.
type Decoder interface {
	// Decode fills rec, which has one slot a field, from one line. Texts alias
	// the line or the decoder's own buffer, and so does the error, which is a
	// *Fault: all are valid until the next call. After an error every slot is absent.
	Decode(line []byte, rec expr.Record) error
}

var (
	_ Decoder = (*JSON)(nil)
	_ Decoder = (*CSV)(nil)
)

// slotsOf maps each path to its slot. Two slots for one path are a mistake of
// the program, not of its user: expr.Fields gives each path one.
func slotsOf(fields []Field) map[string]int {
	slots := make(map[string]int, len(fields))
	for i, f := range fields {
		if _, twice := slots[f.Path]; twice {
			panic(fmt.Sprintf("decode: field %q has two slots", f.Path))
		}
		slots[f.Path] = i
	}
	return slots
}
