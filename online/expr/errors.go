package expr

import (
	"cmp"
	"fmt"
	"slices"
	"strings"
)

// An Error is one fault of an expression, located in its source text.
type Error struct {
	Offset, Length int    // in bytes of the source; Length is 0 where something is missing
	Text           string // the offending piece of the source
	Message        string // what is wrong, and the remedy
	Allowed        string // what may stand there; empty where the message says it
	Suggestion     string // what was probably meant, or empty
}

func (e *Error) Error() string {
	var b strings.Builder
	fmt.Fprintf(&b, "offset %d: ", e.Offset)
	if e.Text != "" {
		fmt.Fprintf(&b, "`%s`: ", e.Text)
	}
	b.WriteString(e.Message)
	if e.Suggestion != "" {
		fmt.Fprintf(&b, "; did you mean %s?", e.Suggestion)
	}
	if e.Allowed != "" {
		fmt.Fprintf(&b, " (allowed: %s)", e.Allowed)
	}
	return b.String()
}

// Errors are all faults that were found in one expression, in order of place.
type Errors []*Error

func (es Errors) Error() string {
	lines := make([]string, len(es))
	for i, e := range es {
		lines[i] = e.Error()
	}
	return strings.Join(lines, "\n")
}

// Unwrap lets errors.As reach a single Error.
func (es Errors) Unwrap() []error {
	errs := make([]error, len(es))
	for i, e := range es {
		errs[i] = e
	}
	return errs
}

// sorted returns the errors in order of place as an error, nil if there are none.
func (es Errors) sorted() error {
	if len(es) == 0 {
		return nil
	}
	slices.SortStableFunc(es, func(a, b *Error) int { return cmp.Compare(a.Offset, b.Offset) })
	return es
}
