package config

import (
	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/token"
)

// A builder turns the library's syntax tree into nodes, and finds fault with what
// a study file does not use.
type builder struct {
	source *source
	faults Faults
	lost   bool // a tag: the library takes what follows for its value, so the rest of the tree means nothing
}

func (b *builder) fault(n ast.Node, format string, args ...any) *Fault {
	at := tokenPlace(n)
	f := b.source.fault(at, 1, format, args...)
	b.faults = append(b.faults, f)
	return f
}

// tokenPlace is where a node begins in the file.
func tokenPlace(n ast.Node) place {
	if m, ok := n.(*ast.MappingNode); ok && !m.IsFlowStyle && len(m.Values) > 0 {
		return tokenPlace(m.Values[0])
	}
	if m, ok := n.(*ast.MappingValueNode); ok {
		return tokenPlace(m.Key)
	}
	t := n.GetToken()
	if t == nil {
		return place{1, 1}
	}
	return place{t.Position.Line, t.Position.Column}
}

func (b *builder) build(n ast.Node) *node {
	out := &node{place: place{1, 1}}
	if n == nil {
		return out
	}
	out.place = tokenPlace(n)
	switch n := n.(type) {
	case *ast.MappingNode:
		out.kind = mapping
		for _, v := range n.Values {
			b.entry(out, v)
		}
	case *ast.MappingValueNode:
		out.kind = mapping
		b.entry(out, n)
	case *ast.SequenceNode:
		out.kind = list
		for _, v := range n.Values {
			out.items = append(out.items, b.build(v))
		}
	case *ast.LiteralNode:
		out.kind, out.style = scalar, block
		if n.Value != nil && n.Value.Token != nil {
			out.text = n.Value.Token.Value
		}
	case *ast.NullNode:
		if t := n.Token; t != nil && t.Type != token.NullType {
			out.place = afterColon(b.source, out.place)
		}
	case *ast.AnchorNode, *ast.AliasNode:
		out.kind = broken
		b.fault(n, "anchors and aliases are not part of a study file").
			ways("write the value out", "quote a text that begins with `&` or `*`")
	case *ast.TagNode:
		b.lost = true
		b.fault(n, "tags are not part of a study file").
			ways("quote a text that begins with `!`, as in when: '!refunded'")
	case *ast.StringNode, *ast.IntegerNode, *ast.FloatNode, *ast.BoolNode, *ast.InfinityNode, *ast.NanNode:
		out.kind = scalar
		t := n.GetToken()
		out.text = t.Value
		switch t.Type {
		case token.SingleQuoteType:
			out.style = single
		case token.DoubleQuoteType:
			out.style = double
		}
	default:
		out.kind = broken
		b.fault(n, "a %s is not part of a study file", n.Type())
	}
	return out
}

func (b *builder) entry(to *node, v *ast.MappingValueNode) {
	if v.Key.IsMergeKey() {
		b.fault(v.Key, "merge keys are not part of a study file").ways("write the values out")
		return
	}
	if _, long := v.Key.(*ast.MappingKeyNode); long {
		b.fault(v.Key, "keys marked by `?` are not part of a study file").ways("write `key: value`")
		return
	}
	key := b.build(v.Key)
	if key.kind == empty && v.Key.GetToken() != nil { // a key that is called null
		key.kind, key.text = scalar, v.Key.GetToken().Value
	}
	to.entries = append(to.entries, entry{key, b.build(v.Value)})
}

// afterColon places a value that is not there: behind the colon that promises it.
func afterColon(s *source, at place) place {
	line := s.line(at.line)
	if i := at.column - 2; i >= 0 && i < len(line) && line[i] == ':' {
		return place{at.line, at.column - 1}
	}
	return at
}
