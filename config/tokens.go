package config

import (
	"strings"
	"unicode/utf8"

	"github.com/goccy/go-yaml/lexer"
	"github.com/goccy/go-yaml/token"
)

// tokenize reads the tokens of a text. Inside { } and [ ] the library's lexer takes a
// line that is indented less than a key before it for something new, though indentation
// means nothing there; so those lines are read as if they stood further to the right.
func tokenize(text string) token.Tokens {
	tokens := lexer.Tokenize(text)
	lines := strings.Split(text, "\n")
	inside := insideFlow(tokens)
	if len(inside) == 0 {
		return wholeScalars(tokens)
	}
	push := 0
	for _, line := range lines {
		push = max(push, min(len(line), 500))
	}
	for number := range inside {
		if number <= len(lines) {
			lines[number-1] = strings.Repeat(" ", push) + lines[number-1]
		}
	}
	tokens = lexer.Tokenize(strings.Join(lines, "\n"))
	for _, t := range tokens {
		if inside[t.Position.Line] {
			t.Position.Column -= push
		}
	}
	return wholeScalars(tokens)
}

// insideFlow finds the lines that begin inside { } or [ ].
func insideFlow(tokens token.Tokens) map[int]bool {
	inside := map[int]bool{}
	depth, line := 0, 0
	for _, t := range tokens {
		for depth > 0 && line < t.Position.Line {
			line++
			inside[line] = true
		}
		line = t.Position.Line
		switch t.Type {
		case token.MappingStartType, token.SequenceStartType:
			depth++
		case token.MappingEndType, token.SequenceEndType:
			depth = max(0, depth-1)
		}
	}
	return inside
}

// wholeScalars joins what the lexer splits inside [ ]: in 127.0.0.1:9092 no blank
// follows the colon, so it separates nothing.
func wholeScalars(tokens token.Tokens) token.Tokens {
	var out token.Tokens
	inside := 0
	for i := 0; i < len(tokens); i++ {
		t := tokens[i]
		switch t.Type {
		case token.MappingStartType, token.SequenceStartType:
			inside++
		case token.MappingEndType, token.SequenceEndType:
			inside--
		case token.MappingValueType:
			if inside <= 0 || len(out) == 0 || i+1 == len(tokens) {
				break
			}
			key, value := out[len(out)-1], tokens[i+1]
			if plainToken(key) && plainToken(value) && adjacent(key, t) && adjacent(t, value) {
				out = out[:len(out)-1]
				t = token.String(key.Value+":"+value.Value, key.Origin+":"+value.Origin, key.Position)
				i++
			}
		}
		out.Add(t)
	}
	return out
}

func plainToken(t *token.Token) bool {
	switch t.Type {
	case token.StringType, token.IntegerType, token.BinaryIntegerType, token.OctetIntegerType,
		token.HexIntegerType, token.FloatType, token.BoolType, token.NullType:
		return true
	}
	return false
}

// adjacent: b begins where a ends.
func adjacent(a, b *token.Token) bool {
	return a.Position.Line == b.Position.Line && a.Position.Column+utf8.RuneCountInString(a.Value) == b.Position.Column
}
