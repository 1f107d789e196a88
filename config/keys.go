package config

import (
	"slices"
	"strings"

	"stillwell/online/expr"
)

// A key is a name that a mapping of the file may have.
type key struct {
	name  string
	later string // what it would ask for and this version does not have; empty: it is here
}

// A schema lists the keys of a mapping.
type schema []key

// keys makes a schema of names that all work.
func keys(names ...string) schema {
	s := make(schema, len(names))
	for i, name := range names {
		s[i].name = name
	}
	return s
}

// with adds keys that are recognised, and refused because this version lacks what they ask for.
func (s schema) with(later string, names ...string) schema {
	for _, name := range names {
		s = append(s, key{name, later})
	}
	return s
}

// names are the keys that work, as a fault lists them.
func (s schema) names() []string {
	var out []string
	for _, k := range s {
		if k.later == "" {
			out = append(out, k.name)
		}
	}
	return out
}

func (s schema) find(name string) (key, bool) {
	i := slices.IndexFunc(s, func(k key) bool { return k.name == name })
	if i < 0 {
		return key{}, false
	}
	return s[i], true
}

// A checker reads one file and gathers its faults.
type checker struct {
	*source
	faults   Faults
	warnings Faults
}

// fault finds fault with a node of the file.
func (c *checker) fault(n *node, format string, args ...any) *Fault {
	return c.add(c.source.fault(n.place, c.width(n), format, args...))
}

func (c *checker) add(f *Fault) *Fault {
	c.faults = append(c.faults, f)
	return f
}

// width is how many characters of its first line a node covers.
func (c *checker) width(n *node) int {
	if n.kind != scalar || n.style == block {
		return 1
	}
	spread := c.places(n)
	if spread == nil {
		return 1
	}
	end, quote := spread[len(spread)-1], 0
	if n.style != plain {
		quote = 1
	}
	if end.line != n.place.line {
		return len(c.line(n.place.line)) - n.place.column + 1
	}
	return end.column - n.place.column + quote
}

// within finds fault with a piece of a scalar's text, where it stands in the file.
func (c *checker) within(n *node, e *expr.Error) {
	at, width := n.place, c.width(n)
	if spread := c.places(n); spread != nil && e.Offset >= 0 && e.Offset < len(spread) {
		at = spread[e.Offset]
		width = len(c.line(at.line)) - at.column + 1 // to the line's end, if it goes on
		if end := min(e.Offset+e.Length, len(spread)-1); spread[end].line == at.line {
			width = spread[end].column - at.column
		}
	}
	message := e.Message
	if e.Text != "" {
		message = "`" + e.Text + "`: " + message
	}
	f := c.source.fault(at, width, "%s", message)
	f.Nearest = e.Suggestion
	if e.Allowed != "" {
		f.allow(e.Allowed)
	}
	c.add(f)
}

// An object is a mapping of the file whose keys are known to be allowed.
type object struct {
	*checker
	node   *node
	what   string // how a fault calls it
	keys   map[string]*node
	values map[string]*node
}

// open reads a mapping strictly: other keys than the schema's, repeated keys and
// keys without a value are faults. It returns nil if n is no mapping.
func (c *checker) open(n *node, what string, s schema) *object {
	if n.kind != mapping {
		c.fault(n, "%s is a mapping of keys to values", what).allow(s.names()...)
		return nil
	}
	o := &object{c, n, what, map[string]*node{}, map[string]*node{}}
	meant := map[string]*node{}
	for _, e := range n.entries {
		if name := o.entry(e, s); name != "" {
			meant[name] = e.key
		}
	}
	for name, key := range meant { // a misspelt key is not a missing one
		if !o.has(name) {
			o.keys[name] = key
		}
	}
	return o
}

// entry takes a key with its value; of an unknown key it returns which was probably meant.
func (o *object) entry(e entry, s schema) (meant string) {
	name := e.key.text
	k, known := s.find(name)
	first, again := o.keys[name]
	switch {
	case !known:
		if slices.Contains(secrets, name) {
			o.fault(e.key, "a secret does not belong in a study file, which is read, copied and logged").
				ways(secretKeys(s)...)
			return ""
		}
		f := o.fault(e.key, "%s has no key `%s`", o.what, name).near(name, s.names())
		if before, _, colon := strings.Cut(name, ":"); colon {
			f.ways("a blank after the colon: " + before + ": …")
		}
		return f.Nearest
	case again:
		o.fault(e.key, "`%s` is given twice, the first time in line %d", name, first.place.line)
		return ""
	}
	o.keys[name] = e.key
	switch {
	case k.later != "":
		o.later(e.key, k.later)
	case e.value.kind == empty:
		o.fault(e.key, "`%s` has no value", name).ways("give one", "leave the key away")
	case e.value.kind != broken:
		o.values[name] = e.value
	}
	return ""
}

// secretKeys are a schema's ways of pointing to a secret.
func secretKeys(s schema) []string {
	for _, name := range s.names() {
		if strings.HasSuffix(name, "_env") {
			return []string{"name the environment variable that holds it: " + name}
		}
	}
	return nil
}

// later refuses what a later version will have.
func (c *checker) later(n *node, what string) *Fault {
	return c.fault(n, "this version does not have %s yet", what)
}

// has says whether a key is there, with a value or without.
func (o *object) has(name string) bool { return o.keys[name] != nil }

// get is a key's value, nil where there is none.
func (o *object) get(name string) *node { return o.values[name] }

// key is where a key stands, for faults about its being there at all.
func (o *object) key(name string) *node { return o.keys[name] }

// require finds fault with a mapping that lacks a key.
func (o *object) require(name, why string) bool {
	if !o.has(name) {
		o.fault(o.node, "%s needs `%s`: %s", o.what, name, why)
	}
	return o.has(name)
}

// oneOf returns which one of several keys is there; none or several are faults. why
// is what the key says.
func (o *object) oneOf(why string, names ...string) string {
	found := ""
	for _, name := range names {
		if !o.has(name) {
			continue
		}
		if found != "" {
			o.fault(o.key(name), "`%s` stands beside `%s`; %s has exactly one of them", name, found, o.what)
			continue
		}
		found = name
	}
	if found == "" {
		o.fault(o.node, "%s has no key that says %s", o.what, why).allow(names...)
	}
	return found
}

// refuse finds fault with keys that have no meaning here, and says why.
func (o *object) refuse(why string, names ...string) {
	for _, name := range names {
		if o.has(name) {
			o.fault(o.key(name), "`%s` has no meaning here: %s", name, why)
		}
	}
}
