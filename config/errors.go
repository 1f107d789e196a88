package config

import (
	"fmt"
	"slices"
	"strings"

	"stillwell/online/expr"
)

// A Fault is one thing wrong with a study file, with its place and what would be right.
type Fault struct {
	File         string
	Line, Column int      // from 1; columns count characters
	Width        int      // characters that the mark covers, at least 1
	Text         string   // the offending text, as the file has it
	Message      string   // what is wrong and why
	Allowed      []string // what may stand there, if it can be listed
	Nearest      string   // the allowed name that was probably meant
	WaysOut      []string // what the user can do instead
	source       string   // the line it stands on
}

// Error shows the fault with its source line and a mark under the offending text.
func (f *Fault) Error() string {
	var b strings.Builder
	fmt.Fprintf(&b, "%s:%d:%d: %s", f.File, f.Line, f.Column, f.Message)
	if f.Nearest != "" {
		fmt.Fprintf(&b, "; did you mean `%s`?", f.Nearest)
	}
	if f.source != "" {
		number := fmt.Sprintf("%5d", f.Line)
		line, before := window([]rune(f.source), f.Column-1, f.Width)
		fmt.Fprintf(&b, "\n%s | %s\n%s | %s%s", number, line, strings.Repeat(" ", len(number)), blank(before), strings.Repeat("^", f.Width))
	}
	if len(f.Allowed) > 0 {
		fmt.Fprintf(&b, "\n        allowed: %s", strings.Join(f.Allowed, ", "))
	}
	for i, way := range f.WaysOut {
		lead := "either: "
		if len(f.WaysOut) == 1 {
			lead = "way out: "
		} else if i > 0 {
			lead = "or: "
		}
		fmt.Fprintf(&b, "\n        %s%s", lead, way)
	}
	return b.String()
}

// Faults are all that is wrong with a file, in the file's order.
type Faults []*Fault

func (f Faults) Error() string {
	texts := make([]string, len(f))
	for i, fault := range f {
		texts[i] = fault.Error()
	}
	return strings.Join(texts, "\n")
}

// Unwrap lets errors.As reach the single faults.
func (f Faults) Unwrap() []error {
	errs := make([]error, len(f))
	for i, fault := range f {
		errs[i] = fault
	}
	return errs
}

// sorted puts faults in the file's order and drops repetitions.
func (f Faults) sorted() Faults {
	slices.SortStableFunc(f, func(a, b *Fault) int {
		if a.Line != b.Line {
			return a.Line - b.Line
		}
		return a.Column - b.Column
	})
	return slices.CompactFunc(f, func(a, b *Fault) bool {
		return a.Line == b.Line && a.Column == b.Column && a.Message == b.Message
	})
}

func (f *Fault) allow(names ...string) *Fault {
	f.Allowed = append(f.Allowed, names...)
	return f
}

// near lists the allowed names, and the one that name is a likely misspelling of.
func (f *Fault) near(name string, allowed []string) *Fault {
	f.Nearest = expr.Nearest(name, allowed)
	return f.allow(allowed...)
}

func (f *Fault) ways(out ...string) *Fault {
	f.WaysOut = append(f.WaysOut, out...)
	return f
}

// shown is how many characters of a source line a fault shows.
const shown = 140

// window cuts a long line around its mark; before is the part of it left of the mark.
func window(line []rune, mark, width int) (text string, before []rune) {
	mark = min(mark, len(line))
	if len(line) <= shown {
		return string(line), line[:mark]
	}
	from := max(0, min(mark-shown/3, len(line)-shown))
	to := min(len(line), max(from+shown, mark+width))
	cut := slices.Clone(line[from:to])
	if from > 0 {
		cut[0] = '…'
	}
	if to < len(line) {
		cut[len(cut)-1] = '…'
	}
	return string(cut), cut[:mark-from]
}

// blank has the width of text on the screen, tabs included.
func blank(text []rune) string {
	out := make([]rune, len(text))
	for i, r := range text {
		out[i] = ' '
		if r == '\t' {
			out[i] = '\t'
		}
	}
	return string(out)
}
