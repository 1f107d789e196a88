package config

import (
	"bytes"
	"errors"
	"fmt"
	"regexp"
	"slices"
	"strings"
	"unicode/utf8"

	"github.com/goccy/go-yaml"
	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/parser"
	"github.com/goccy/go-yaml/token"
)

const (
	maxFile  = 256 << 10 // bytes of a study file
	maxDepth = 32        // nested collections; the contract needs seven
)

// kind says what a node of the file is.
type kind uint8

const (
	empty   kind = iota // nothing, or null
	scalar              // a text, a number, true or false: all kept as text
	mapping             // keys with values
	list
	broken // something that has a fault already
)

// style is how a scalar is written, which decides where its characters stand.
type style uint8

const (
	plain style = iota
	single
	double
	block // literal or folded
)

// A place is a line and a column, from 1; columns count characters.
type place struct{ line, column int }

// A node is one piece of the file, with its place.
type node struct {
	kind    kind
	place   place
	text    string // of a scalar
	style   style
	entries []entry // of a mapping, in the file's order
	items   []*node // of a list
}

// child finds a key of a mapping with its value, nil where it has none.
func (n *node) child(name string) (key, value *node) {
	for _, e := range n.entries {
		if e.key.text == name {
			return e.key, e.value
		}
	}
	return nil, nil
}

// An entry is a key of a mapping with its value.
type entry struct{ key, value *node }

// A source is the text of a file, by line.
type source struct {
	path  string
	lines [][]rune
}

func newSource(path string, data []byte) *source {
	s := &source{path: path}
	for line := range strings.SplitSeq(string(data), "\n") {
		s.lines = append(s.lines, []rune(line))
	}
	return s
}

// line is a line by its number, empty beyond the text.
func (s *source) line(number int) []rune {
	if number < 1 || number > len(s.lines) {
		return nil
	}
	return s.lines[number-1]
}

// fault makes a fault about width characters at a place.
func (s *source) fault(at place, width int, format string, args ...any) *Fault {
	at.line, at.column = max(1, at.line), max(1, at.column)
	line := s.line(at.line)
	width = max(1, min(width, len(line)-at.column+1))
	line = hidden(line)
	f := &Fault{File: s.path, Line: at.line, Column: at.column, Width: width, Message: fmt.Sprintf(format, args...), source: string(line)}
	if at.column <= len(line) {
		f.Text = string(line[at.column-1 : at.column-1+width])
	}
	return f
}

// secrets are keys whose value nobody should see, in a fault least of all.
var secrets = []string{"password", "token", "secret", "passphrase"}

var secretValue = regexp.MustCompile(`\b(?:` + strings.Join(secrets, "|") + `)["']?\s*:\s*(\S.*)$`)

// hidden stars out a secret that someone wrote into the file all the same.
func hidden(line []rune) []rune {
	at := secretValue.FindStringSubmatchIndex(string(line))
	if at == nil {
		return line
	}
	from := utf8.RuneCountInString(string(line)[:at[2]])
	return append(slices.Clone(line[:from]), []rune(strings.Repeat("*", len(line)-from))...)
}

// clean takes away what editors put in and no one sees: a byte order mark, carriage returns.
func clean(data []byte) []byte {
	return bytes.ReplaceAll(bytes.TrimPrefix(data, []byte("\xef\xbb\xbf")), []byte("\r\n"), []byte("\n"))
}

// parseTree reads the YAML of a study file. Only the parts of YAML that a study
// file needs are allowed: no anchors, aliases, tags or merges, one document.
func parseTree(s *source, data []byte) (root *node, faults Faults) {
	if f := unreadable(s, data); f != nil {
		return nil, Faults{f}
	}
	tokens := tokenize(string(data))
	if f := tooDeep(s, tokens); f != nil {
		return nil, Faults{f}
	}
	file, err := parseTokens(tokens)
	if err != nil {
		return nil, Faults{syntax(s, err)}
	}
	if len(file.Docs) == 0 || file.Docs[0].Body == nil {
		return nil, Faults{s.fault(place{1, 1}, 1, "the file is empty").allow(topKeys.names()...)}
	}
	b := &builder{source: s}
	root = b.build(file.Docs[0].Body)
	if len(file.Docs) > 1 && file.Docs[1].Body != nil {
		b.fault(file.Docs[1].Body, "a study file is one document; here a second one begins")
	}
	if b.lost {
		return nil, b.faults
	}
	return root, b.faults
}

// unreadable finds what no YAML file may hold.
func unreadable(s *source, data []byte) *Fault {
	if len(data) > maxFile {
		return s.fault(place{1, 1}, 1, "the file has %d bytes; a study file has at most %d", len(data), maxFile)
	}
	at := place{1, 1}
	for i := 0; i < len(data); {
		r, size := utf8.DecodeRune(data[i:])
		switch {
		case r == utf8.RuneError && size == 1:
			return s.fault(at, 1, "byte 0x%02x is no valid UTF-8", data[i])
		case r < ' ' && r != '\n' && r != '\t', r == 0x7f:
			return s.fault(at, 1, "control character U+%04X cannot stand in a study file", r)
		case r == '\n':
			at = place{at.line + 1, 0}
		}
		at.column++
		i += size
	}
	return nil
}

// tooDeep guards the parser, which recurses, against nests that no stack holds.
func tooDeep(s *source, tokens token.Tokens) *Fault {
	depth, line, onLine := 0, 0, 0
	for _, t := range tokens {
		switch t.Type {
		case token.MappingStartType, token.SequenceStartType:
			depth++
		case token.MappingEndType, token.SequenceEndType:
			depth--
		case token.SequenceEntryType, token.MappingKeyType, token.TagType, token.AnchorType, token.AliasType, token.MappingValueType:
			if t.Position.Line != line {
				line, onLine = t.Position.Line, 0
			}
			if depth <= 0 {
				onLine++
			}
		}
		if depth > maxDepth || onLine > maxDepth || (depth <= 0 && t.Position.Column > 1000) {
			return s.fault(place{t.Position.Line, t.Position.Column}, 1, "this is nested more deeply than a study file can be")
		}
	}
	return nil
}

// parseTokens turns a panic of the library into an error: what a user typed must not stop the program.
func parseTokens(tokens token.Tokens) (file *ast.File, err error) {
	defer func() {
		if r := recover(); r != nil {
			err = fmt.Errorf("this is not YAML (%v)", r)
		}
	}()
	return parser.Parse(tokens, 0, parser.AllowDuplicateMapKey())
}

// syntax places an error of the YAML parser.
func syntax(s *source, err error) *Fault {
	var at yaml.Error
	if !errors.As(err, &at) || at.GetToken() == nil {
		return s.fault(place{1, 1}, 1, "%s", err)
	}
	p := at.GetToken().Position
	f := s.fault(place{p.Line, p.Column}, 1, "this is not YAML: %s", at.GetMessage())
	if strings.HasSuffix(at.GetMessage(), "must be specified") {
		return f.ways("close the bracket or brace that was opened before this")
	}
	return hint(f)
}

// hint explains the traps of YAML that expressions fall into.
func hint(f *Fault) *Fault {
	line := f.source
	for _, trap := range []struct{ sign, way string }{
		{"\t", "indent with blanks, not with tabs"},
		{": >", "a text that begins with `>` must be quoted, as in against: '>= 0'"},
		{": *", "a text that begins with `*` must be quoted"},
		{": &", "a text that begins with `&` must be quoted"},
		{": !", "a text that begins with `!` must be quoted, as in when: '!refunded'"},
		{": \"", "quote an expression that begins with \" as a whole, with single quotes around it"},
		{": '", "a quote inside single quotes is written twice"},
	} {
		if strings.Contains(line, trap.sign) {
			return f.ways(trap.way)
		}
	}
	return f
}
