package expr

import (
	"cmp"
	"errors"
	"fmt"
	"slices"
	"strconv"
	"strings"

	"github.com/expr-lang/expr/ast"
	"github.com/expr-lang/expr/builtin"
	"github.com/expr-lang/expr/conf"
	"github.com/expr-lang/expr/file"
	"github.com/expr-lang/expr/parser"
	"github.com/expr-lang/expr/parser/lexer"
	"github.com/expr-lang/expr/parser/utils"
)

// maxSource bounds the length of an expression in bytes, and by that the depth
// of every recursion over its tree.
const maxSource = 16 << 10

// A source is the text of an expression with what was found in it.
type source struct {
	text   string
	starts []int // byte offset of each rune, and of the end; the parser counts in runes
	tokens []lexer.Token
	faults Errors
}

// parse reads the text into a tree; on faults it is nil. The parser stops at its
// first fault, so what a look at the tokens can tell is told before, all at once.
func parse(text string) (*source, ast.Node) {
	s := &source{text: text}
	if len(text) > maxSource {
		s.fault(file.Location{}, fmt.Sprintf("the expression has %d bytes; at most %d are read", len(text), maxSource))
		return s, nil
	}
	for i := range text {
		s.starts = append(s.starts, i)
	}
	s.starts = append(s.starts, len(text))
	if err := s.lex(); err != nil {
		s.syntaxFault(err)
		return s, nil
	}
	if len(s.tokens) == 1 { // the end alone
		s.fault(file.Location{}, "the expression is empty")
		return s, nil
	}
	s.screen()
	if len(s.faults) > 0 {
		return s, nil
	}
	tree, err := parser.ParseWithConfig(text, grammar())
	if err != nil {
		s.syntaxFault(err)
		return s, nil
	}
	return s, tree.Node
}

func (s *source) lex() error {
	l := lexer.New()
	l.DisableIfOperator = true
	l.Reset(file.NewSource(s.text))
	for {
		t, err := l.Next()
		if err != nil {
			return err
		}
		s.tokens = append(s.tokens, t)
		if t.Kind == lexer.EOF {
			return nil
		}
	}
}

// grammar switches off all functions of the parser library, some of which have
// a syntax of their own, so that their names are free.
func grammar() *conf.Config {
	c := &conf.Config{
		MaxNodes:          maxSource,
		Functions:         conf.FunctionsTable{},
		DisableIfOperator: true,
	}
	for _, f := range builtin.Builtins {
		c.Functions[f.Name] = f // a name that is the user's own is parsed as a plain call
	}
	return c
}

// otherwise is what to write in place of tokens that mean something elsewhere.
var otherwise = map[string]string{
	"=": "==", "&": "&&", "|": "||", "^": "**", "?.": ".",
}

const operators = "+ - * / ** == != < <= > >= && || ! ?? in"

// screen reports brackets without partner and tokens that have no meaning here.
func (s *source) screen() {
	var open []int
	for i, t := range s.tokens {
		switch t.Kind {
		case lexer.Number:
			s.screenNumber(t)
		case lexer.Bytes:
			s.fault(t.Location, "a text is written in quotes, without a letter before them")
		case lexer.Bracket:
			switch t.Value {
			case "{", "}":
				s.fault(t.Location, "braces have no meaning here")
			case "(", "[":
				open = append(open, i)
			default:
				n := len(open) - 1
				if n < 0 || !partners(s.tokens[open[n]].Value, t.Value) {
					s.fault(t.Location, "nothing is open that this bracket could close")
					return
				}
				open = open[:n]
			}
		case lexer.Operator:
			s.screenOperator(i)
		}
	}
	for _, i := range open {
		s.fault(s.tokens[i].Location, "this bracket is never closed")
	}
}

// screenNumber reports what the parser would report at the token after it.
func (s *source) screenNumber(t lexer.Token) {
	digits := strings.ReplaceAll(t.Value, "_", "")
	if _, err := strconv.ParseInt(digits, 0, 64); err == nil || strings.TrimLeft(digits, "0123456789") == "" && len(digits) < 19 {
		return
	}
	_, err := strconv.ParseFloat(digits, 64)
	switch whole := strings.TrimLeft(digits, "0123456789") == ""; {
	case errors.Is(err, strconv.ErrRange):
		s.fault(t.Location, "the number is too large")
	case err != nil:
		s.fault(t.Location, "no number is written like this")
	case whole:
		s.fault(t.Location, "an integer of this size is written with a decimal point, as all numbers here are float64")
	}
}

func (s *source) screenOperator(i int) {
	t := s.tokens[i]
	isName := i > 0 && s.tokens[i-1].Is(lexer.Operator, ".")
	switch t.Value {
	case "+", "-", "*", "/", "**", "==", "!=", "<", "<=", ">", ">=",
		"&&", "||", "!", "and", "or", "not", "in", "??", ",":
	case ".":
		if next := s.tokens[i+1]; next.Kind != lexer.Identifier && (next.Kind != lexer.Operator || !utils.IsValidIdentifier(next.Value)) {
			s.fault(t.Location, "a name must follow the dot")
		}
	case "matches", "contains", "startsWith", "endsWith", "let":
		if !isName {
			e := s.fault(t.Location, fmt.Sprintf("no operator of this name; a field of this name is written field(%q)", t.Value))
			e.Allowed = operators
		}
	default:
		e := s.fault(t.Location, "no such operator")
		e.Allowed, e.Suggestion = operators, otherwise[t.Value]
	}
}

func partners(open, closing string) bool { return open+closing == "()" || open+closing == "[]" }

// syntaxFault says in our words what the parser could not read.
func (s *source) syntaxFault(err error) {
	var fe *file.Error
	if !errors.As(err, &fe) {
		s.fault(file.Location{}, err.Error())
		return
	}
	at, message := fe.Location, fe.Message
	switch {
	case strings.HasSuffix(message, "unexpected token EOF"), strings.HasPrefix(message, "unexpected end"):
		end := len(s.starts) - 1
		at, message = file.Location{From: end, To: end}, "the expression ends where a value is still expected"
	case strings.HasPrefix(message, "unexpected token"), message == "expected name":
		message = "not expected here; a value, or an operator before it, is missing"
	case strings.Contains(message, "coalesce"):
		message = "?? beside another operator needs parentheses, as in (a ?? 0) + b"
	case strings.Contains(message, "not terminated"):
		message = "a text that begins before here has no closing quote"
	case strings.HasPrefix(message, "unrecognized character"):
		message = "a character without meaning here"
	case strings.HasPrefix(message, "bad number syntax"):
		message = "a number must not run into a name"
	}
	s.fault(at, message)
}

// fault notes a fault at a place given in runes.
func (s *source) fault(at file.Location, message string) *Error {
	end := max(0, len(s.starts)-1)
	from, to := min(max(at.From, 0), end), min(max(at.To, at.From, 0), end)
	e := &Error{Message: message}
	if end > 0 {
		e.Offset, e.Length = s.starts[from], s.starts[to]-s.starts[from]
		e.Text = s.text[e.Offset : e.Offset+e.Length]
	}
	s.faults = append(s.faults, e)
	return e
}

// word is the source text at a place.
func (s *source) word(at file.Location) string { return s.text[s.starts[at.From]:s.starts[at.To]] }

// span returns where a node stands, all its parts and brackets included.
func (s *source) span(n ast.Node) file.Location { return s.balance(s.extent(n)) }

// extent spans the tokens that the parser notes, one of each node below n.
func (s *source) extent(n ast.Node) file.Location {
	at := n.Location()
	switch n := n.(type) {
	case *ast.UnaryNode:
		at = union(at, s.extent(n.Node))
	case *ast.BinaryNode:
		at = union(union(at, s.extent(n.Left)), s.extent(n.Right))
	case *ast.MemberNode:
		at = union(union(at, s.extent(n.Node)), s.extent(n.Property))
	case *ast.CallNode:
		at = union(at, s.extent(n.Callee))
		for _, a := range n.Arguments {
			at = union(at, s.extent(a))
		}
		if i := s.tokenAt(at.To); i < len(s.tokens) && s.tokens[i].Is(lexer.Bracket, "(") { // no arguments
			at.To = s.tokens[i].To
		}
	case *ast.ArrayNode:
		for _, a := range n.Nodes {
			at = union(at, s.extent(a))
		}
	}
	return at
}

func union(a, b file.Location) file.Location {
	return file.Location{From: min(a.From, b.From), To: max(a.To, b.To)}
}

// tokenAt returns the index of the first token at or after a place.
func (s *source) tokenAt(from int) int {
	i, _ := slices.BinarySearchFunc(s.tokens, from, func(t lexer.Token, from int) int { return cmp.Compare(t.From, from) })
	return i
}

// balance widens a span until each bracket in it has its partner.
func (s *source) balance(at file.Location) file.Location {
	first, last := s.tokenAt(at.From), s.tokenAt(at.To)
	closers, openers := 0, 0 // without partner in the span
	for _, t := range s.tokens[first:last] {
		switch n := nesting(t); {
		case n > 0:
			openers++
		case n < 0 && openers > 0:
			openers--
		case n < 0:
			closers++
		}
	}
	for i := first - 1; i >= 0 && closers > 0; i-- {
		closers -= nesting(s.tokens[i])
		at.From = s.tokens[i].From
	}
	for i := last; i < len(s.tokens) && openers > 0; i++ {
		openers += nesting(s.tokens[i])
		at.To = s.tokens[i].To
	}
	return at
}

// nesting is +1 for a bracket that opens, -1 for one that closes, else 0.
func nesting(t lexer.Token) int {
	switch {
	case t.Is(lexer.Bracket, "(", "["):
		return 1
	case t.Is(lexer.Bracket, ")", "]"):
		return -1
	}
	return 0
}
