package config

import (
	"iter"
	"strconv"
	"unicode/utf8"
)

// places says where each byte of a scalar's text stands in the file, with one more
// place for its end. It is nil if the text cannot be followed; the scalar's own
// place must do then.
func (s *source) places(n *node) []place {
	t := &tracer{style: n.style, left: n.text, at: n.place}
	if n.style == single || n.style == double {
		t.at.column++ // the quote
	}
	first := true
	for l := range s.physical(n) {
		if !first {
			t.turn()
		}
		first = false
		if t.left == "" {
			break
		}
		if !t.line(l) {
			return nil
		}
	}
	t.turn()
	if t.left != "" {
		return nil
	}
	return append(t.out, t.at)
}

// A stretch is the part of a physical line that belongs to a scalar.
type stretch struct {
	at   place
	text []rune
}

// physical goes through the lines that may hold a scalar, without indentation and
// quotes; there may be more than it has, for the text says where it ends.
func (s *source) physical(n *node) iter.Seq[stretch] {
	if n.style == block {
		return s.blockLines(n)
	}
	return func(yield func(stretch) bool) {
		at := n.place
		if n.style != plain {
			at.column++ // the quote
		}
		line := s.line(at.line)
		if at.column-1 > len(line) || !yield(stretch{at, line[at.column-1:]}) {
			return
		}
		for number := at.line + 1; number <= len(s.lines); number++ {
			line := s.line(number)
			indent := indentation(line)
			if !yield(stretch{place{number, indent + 1}, line[indent:]}) {
				return
			}
		}
	}
}

// blockLines goes through the lines under a | or >, whose indentation the first one
// with a text sets.
func (s *source) blockLines(n *node) iter.Seq[stretch] {
	return func(yield func(stretch) bool) {
		indent := -1
		for number := n.place.line + 1; number <= len(s.lines); number++ {
			line := s.line(number)
			own := indentation(line)
			if indent < 0 && own < len(line) {
				indent = own
			}
			cut := min(len(line), max(0, indent))
			if own < len(line) && own < indent || !yield(stretch{place{number, cut + 1}, line[cut:]}) {
				return
			}
		}
	}
}

func indentation(line []rune) int {
	for i, r := range line {
		if r != ' ' && r != '\t' {
			return i
		}
	}
	return len(line)
}

// A tracer follows a scalar's text through the lines it was read from.
type tracer struct {
	style style
	left  string  // what is still to be found
	out   []place // of the bytes found
	at    place   // behind the last one
}

// line follows the text through one line, and says whether it could.
func (t *tracer) line(l stretch) bool {
	if t.style != block {
		l.text = trimEnd(l.text)
	}
	t.at = l.at
	for i := 0; i < len(l.text) && t.left != ""; {
		r, width, ok := unit(t.style, l.text[i:])
		if ok && !t.take(r) {
			return false
		}
		i += width
		t.at.column += width
	}
	return true
}

// turn takes what a line's end stands for: a blank, a newline, or nothing.
func (t *tracer) turn() {
	if t.left != "" && (t.left[0] == ' ' || t.left[0] == '\n') {
		t.take(rune(t.left[0]))
	}
}

func (t *tracer) take(r rune) bool {
	next, size := utf8.DecodeRuneInString(t.left)
	if next != r {
		return false
	}
	for range size {
		t.out = append(t.out, t.at)
	}
	t.left = t.left[size:]
	return true
}

func trimEnd(line []rune) []rune {
	for len(line) > 0 && (line[len(line)-1] == ' ' || line[len(line)-1] == '\t') {
		line = line[:len(line)-1]
	}
	return line
}

// escapes of a double-quoted scalar that stand for one character.
var escapes = map[rune]rune{
	'0': 0, 'a': 7, 'b': 8, 't': 9, '\t': 9, 'n': 10, 'v': 11, 'f': 12, 'r': 13, 'e': 27, ' ': ' ', '"': '"', '/': '/', '\\': '\\',
	'N': 0x85, '_': 0xa0, 'L': 0x2028, 'P': 0x2029,
}

// unit reads what stands for one character of the text: the character, and how many
// it takes in the file. ok is false if it stands for none (an escaped line end).
func unit(st style, line []rune) (r rune, width int, ok bool) {
	switch {
	case st == single && len(line) > 1 && line[0] == '\'' && line[1] == '\'':
		return '\'', 2, true
	case st == double && line[0] == '\\':
		if len(line) == 1 {
			return 0, 1, false
		}
		digits := map[rune]int{'x': 2, 'u': 4, 'U': 8}[line[1]]
		if digits == 0 {
			return escapes[line[1]], 2, true
		}
		if len(line) < 2+digits {
			return 0, len(line), false
		}
		code, err := strconv.ParseUint(string(line[2:2+digits]), 16, 32)
		return rune(code), 2 + digits, err == nil
	}
	return line[0], 1, true
}
