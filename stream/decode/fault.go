package decode

import "fmt"

// A FaultKind says what made an event unusable.
type FaultKind uint8

const (
	Syntax     FaultKind = iota // not JSON, or not a CSV record
	UTF8                        // text that is no valid UTF-8, a lone surrogate included
	TooDeep                     // nested deeper than MaxDepth
	NotObject                   // JSON, but no object
	TooLong                     // longer than the caller allows; no decoder here raises it
	Cells                       // a CSV record with more or fewer cells than its header
	NoHeader                    // a CSV record before any header
	BadTime                     // no time, or not of the form asked for
	OutOfRange                  // a time that int64 nanoseconds cannot hold
)

var faultNames = [...]string{
	Syntax: "syntax", UTF8: "utf8", TooDeep: "too deep", NotObject: "not an object", TooLong: "too long",
	Cells: "cells", NoHeader: "no header", BadTime: "bad time", OutOfRange: "out of range",
}

// String names the kind in a word or two, as counters and reject files show it.
func (k FaultKind) String() string {
	if int(k) < len(faultNames) {
		return faultNames[k]
	}
	return fmt.Sprintf("fault %d", uint8(k))
}

// A Fault says why a line is no event. Decoders hand out one Fault again and
// again, so a flood of malformed lines costs no memory; copy what is to be kept.
type Fault struct {
	Kind   FaultKind
	Offset int    // byte within the line; negative where no byte is to blame
	Why    string // what was found or would have been allowed; a constant
}

// Error reads "syntax at byte 17: a colon must follow the key".
func (f *Fault) Error() string {
	if f.Offset < 0 {
		return fmt.Sprintf("%s: %s", f.Kind, f.Why)
	}
	return fmt.Sprintf("%s at byte %d: %s", f.Kind, f.Offset, f.Why)
}
