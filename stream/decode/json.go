package decode

import (
	"math"

	"stillwell/online/expr"
)

// MaxDepth is how deep objects and arrays may be nested; the event itself is level 1.
const MaxDepth = 512

// JSON decodes events that are one JSON object (RFC 8259) each, in UTF-8.
//
//   - A path a.b is the key b of the object under a. If that is absent, a key that
//     reads "a.b" in the outermost object is taken instead.
//   - Of a key that comes twice in one object the last counts, with all that is under it.
//   - null is absent. An array or an object is expr.Other.
//   - A number keeps its text. Num is the nearest float64, infinite beyond the largest,
//     for fields marked Numeric, and NaN for others.
//   - Strings are as written: nothing is replaced or normalised. Broken UTF-8 and
//     surrogate escapes without their other half are faults (I-JSON, RFC 7493).
type JSON struct {
	nodes   []node
	flat    []expr.Value // by slot: values of keys that are whole dotted paths
	isFlat  bool         // this event has such keys
	scratch []byte       // unescaped strings of this event
	fault   Fault
	stack   [MaxDepth]frame

	unwanted expr.Value // takes what nobody asked for
}

// A frame is an object or array that is open.
type frame struct {
	key   *key // under which it stands; nil if it is not wanted
	start int
	node  int
	array bool
}

// NewJSON returns a decoder of the fields, whose order gives their slots. It
// panics if two fields have one path.
func NewJSON(fields []Field) *JSON {
	slotsOf(fields)
	return &JSON{nodes: buildNodes(fields), flat: make([]expr.Value, len(fields))}
}

// Decode implements Decoder.
func (d *JSON) Decode(line []byte, rec expr.Record) error {
	clear(rec)
	d.scratch = d.scratch[:0]
	ok := d.object(line, rec)
	if d.isFlat {
		d.mergeFlat(rec)
	}
	if ok {
		return nil
	}
	clear(rec)
	return &d.fault
}

// mergeFlat gives absent fields the values of keys that are whole paths.
func (d *JSON) mergeFlat(rec expr.Record) {
	for i := range d.flat {
		if rec[i].Kind == expr.Absent {
			rec[i] = d.flat[i]
		}
	}
	clear(d.flat)
	d.isFlat = false
}

// object reads a line that is one object. It goes through nested values with a
// stack of its own, so that depth costs no recursion.
func (d *JSON) object(s []byte, rec expr.Record) bool {
	p := skipSpace(s, 0)
	if peek(s, p) != '{' {
		return d.notObject(s, p)
	}
	if p = skipSpace(s, p+1); peek(s, p) == '}' {
		return d.end(s, p+1)
	}
	depth, in := 0, frame{node: rootNode}
	for {
		var k *key // of the value that comes next; nil if it is not wanted
		if !in.array {
			if k, p = d.member(s, p, in.node, rec); p < 0 {
				return false
			}
		}
		if c := peek(s, p); c == '{' || c == '[' {
			d.stack[depth] = in
			depth++
			if depth == MaxDepth {
				return d.fail(TooDeep, p, "objects and arrays are nested too deeply")
			}
			in = frame{key: k, start: p, array: c == '['}
			if k != nil {
				in.node = k.node
			}
			if p = skipSpace(s, p+1); peek(s, p) != c+2 { // ']' and '}' lie two beyond '[' and '{'
				continue
			}
		} else if p = d.scalar(s, p, k, rec); p < 0 {
			return false
		}

		for { // after a value, also after one that closes here
			p = skipSpace(s, p)
			c := peek(s, p)
			if c == ',' {
				p = skipSpace(s, p+1)
				break
			}
			if in.array && c != ']' || !in.array && c != '}' {
				return d.fail(Syntax, p, "a comma or the closing bracket must follow the value")
			}
			p++
			if depth == 0 {
				return d.end(s, p)
			}
			if in.key != nil && in.key.slot >= 0 {
				*d.value(rec, in.key) = expr.Value{Kind: expr.Other, Text: s[in.start:p]}
			}
			depth--
			in = d.stack[depth]
		}
	}
}

// member reads a key and its colon. It returns the key, if the value is wanted, and
// where the value starts; negative after a fault.
func (d *JSON) member(s []byte, p, node int, rec expr.Record) (k *key, start int) {
	if peek(s, p) != '"' {
		d.fail(Syntax, p, "a key in double quotes must stand here")
		return nil, -1
	}
	q := scanPlain(s, p+1)
	if peek(s, q) == '"' {
		if node != 0 {
			k = d.nodes[node].find(s, p+1, q)
		}
	} else if k, q = d.hardKey(s, p+1, q, node); q < 0 {
		return nil, -1
	}
	if p = skipSpace(s, q+1); peek(s, p) != ':' {
		d.fail(Syntax, p, "a colon must follow the key")
		return nil, -1
	}
	if k != nil && k.node != 0 { // of a key that comes twice nothing may remain
		for _, slot := range d.nodes[k.node].below {
			rec[slot] = expr.Value{}
		}
	}
	return k, skipSpace(s, p+1)
}

// scalar reads a value that is no object or array, and keeps it if k wants it. It
// returns the end, negative after a fault.
func (d *JSON) scalar(s []byte, p int, k *key, rec expr.Record) (end int) {
	v := &d.unwanted
	if k != nil && k.slot >= 0 {
		v = d.value(rec, k)
	}
	switch c := peek(s, p); c {
	case '"':
		q := scanPlain(s, p+1)
		text := s[p+1 : q]
		if peek(s, q) != '"' {
			if text, q = d.hardText(s, p+1, q, k); q < 0 {
				return -1
			}
		}
		*v = expr.Value{Kind: expr.Text, Text: text}
		return q + 1
	case 't', 'f', 'n':
		if end = scanWord(s, p); end < 0 {
			break
		}
		if c == 'n' {
			*v = expr.Value{}
		} else {
			*v = expr.Value{Kind: expr.Bool, True: c == 't', Text: s[p:end]}
		}
		return end
	default:
		num, end, form := scanDecimal(s, p)
		if form != strict {
			break
		}
		*v = expr.Value{Kind: expr.Number, Num: math.NaN(), Text: s[p:end]}
		if k != nil && k.numeric {
			v.Num = num.float(v.Text)
		}
		return end
	}
	d.fail(Syntax, p, "a value must stand here: true, false, null, a number, string, array or object")
	return -1
}

// value is where the value of a wanted key goes.
func (d *JSON) value(rec expr.Record, k *key) *expr.Value {
	if k.flat {
		d.isFlat = true
		return &d.flat[k.slot]
	}
	return &rec[k.slot]
}

// hardKey reads on in a key that scanPlain has not seen to its end at q; end is
// negative after a fault.
func (d *JSON) hardKey(s []byte, p, q, node int) (k *key, end int) {
	end, escaped, kind, why := scanText(s, q)
	if why != "" {
		d.fail(kind, end, why)
		return nil, -1
	}
	if node == 0 {
		return nil, end
	}
	if !escaped {
		return d.nodes[node].find(s, p, end), end
	}
	n := len(d.scratch)
	d.scratch = unescape(d.scratch, s[p:end])
	k = d.nodes[node].find(d.scratch, n, len(d.scratch))
	return k, end
}

// hardText reads on in a string that scanPlain has not seen to its end at q; end
// is negative after a fault.
func (d *JSON) hardText(s []byte, p, q int, k *key) (text []byte, end int) {
	end, escaped, kind, why := scanText(s, q)
	if why != "" {
		d.fail(kind, end, why)
		return nil, -1
	}
	if !escaped || k == nil || k.slot < 0 {
		return s[p:end], end
	}
	n := len(d.scratch)
	d.scratch = unescape(d.scratch, s[p:end])
	return d.scratch[n:], end
}

// scanWord returns the end of the word true, false or null at p, or -1.
func scanWord(s []byte, p int) int {
	switch {
	case len(s) >= p+4 && (string(s[p:p+4]) == "true" || string(s[p:p+4]) == "null"):
		return p + 4
	case len(s) >= p+5 && string(s[p:p+5]) == "false":
		return p + 5
	}
	return -1
}

// end accepts nothing but white space after the object.
func (d *JSON) end(s []byte, p int) bool {
	if p = skipSpace(s, p); p < len(s) {
		return d.fail(Syntax, p, "text follows the object; an event is one line")
	}
	return true
}

func (d *JSON) notObject(s []byte, p int) bool {
	switch c := peek(s, p); {
	case p == len(s):
		return d.fail(Syntax, p, "the line is empty")
	case c == '[' || c == '"' || c == '-' || c-'0' <= 9 || scanWord(s, p) > 0:
		return d.fail(NotObject, p, "an event is a JSON object, in braces")
	}
	return d.fail(Syntax, p, "an event is a JSON object, in braces")
}

// fail notes the fault and returns false, for its callers to return.
func (d *JSON) fail(kind FaultKind, at int, why string) bool {
	d.fault = Fault{Kind: kind, Offset: at, Why: why}
	return false
}
