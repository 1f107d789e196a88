package decode

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"testing"
	"unicode/utf16"
	"unicode/utf8"

	"stillwell/online/expr"
)

// The standard library's JSON package is the oracle. It is more generous in three
// ways, which are checked apart: it replaces broken UTF-8, it replaces lone
// surrogates, and it goes down to 10,000 levels.

var oracleFields = []Field{
	{Path: "id"}, {Path: "ts"}, {Path: "amount", Numeric: true}, {Path: "ms", Numeric: true}, {Path: "order"},
	{Path: "order.total", Numeric: true}, {Path: "order.to.port"}, {Path: "order.to"}, {Path: "a"}, {Path: "a.b"}, {Path: ""},
	{Path: "passenger_first_name"}, {Path: "passenger_other_name"}, {Path: "überfahrt"}, {Path: "ü.ß"},
}

// oracle decodes a line the slow way; ok tells whether it is an event.
func oracle(line []byte, fields []Field) (rec expr.Record, ok bool) {
	var top map[string]json.RawMessage
	if json.Unmarshal(line, &top) != nil || top == nil || !utf8.Valid(line) || hasLoneSurrogate(line) || depthOf(line) > MaxDepth {
		return nil, false
	}
	rec = make(expr.Record, len(fields))
	for i, f := range fields {
		if rec[i] = oracleValue(lookup(top, f.Path), f.Numeric); rec[i].Kind == expr.Absent {
			rec[i] = oracleValue(top[f.Path], f.Numeric)
		}
	}
	return rec, true
}

func lookup(in map[string]json.RawMessage, path string) json.RawMessage {
	name, rest, more := strings.Cut(path, ".")
	if !more {
		return in[name]
	}
	var under map[string]json.RawMessage
	if in[name] == nil || json.Unmarshal(in[name], &under) != nil {
		return nil
	}
	return lookup(under, rest)
}

func oracleValue(raw json.RawMessage, numeric bool) expr.Value {
	switch {
	case raw == nil || raw[0] == 'n':
		return expr.Value{}
	case raw[0] == '"':
		var s string
		if err := json.Unmarshal(raw, &s); err != nil {
			panic(err)
		}
		return expr.Value{Kind: expr.Text, Text: []byte(s)}
	case raw[0] == 't' || raw[0] == 'f':
		return expr.Value{Kind: expr.Bool, True: raw[0] == 't', Text: raw}
	case raw[0] == '{' || raw[0] == '[':
		return expr.Value{Kind: expr.Other, Text: raw}
	}
	v := expr.Value{Kind: expr.Number, Num: math.NaN(), Text: raw}
	if numeric {
		v.Num, _ = strconv.ParseFloat(string(raw), 64) // infinite if out of range
	}
	return v
}

func hasLoneSurrogate(line []byte) bool {
	for i := 0; i < len(line); i++ {
		if line[i] != '\\' {
			continue
		}
		i++
		if i+5 > len(line) || line[i] != 'u' {
			continue
		}
		r, _ := strconv.ParseUint(string(line[i+1:i+5]), 16, 16)
		if !utf16.IsSurrogate(rune(r)) {
			continue
		}
		i += 5
		if i+6 > len(line) || line[i] != '\\' || line[i+1] != 'u' {
			return true
		}
		low, _ := strconv.ParseUint(string(line[i+2:i+6]), 16, 16)
		if utf16.DecodeRune(rune(r), rune(low)) == utf8.RuneError {
			return true
		}
		i += 5
	}
	return false
}

// depthOf is the deepest level of a valid document.
func depthOf(line []byte) int {
	deepest, depth := 0, 0
	for tokens := json.NewDecoder(bytes.NewReader(line)); ; {
		token, err := tokens.Token()
		if errors.Is(err, io.EOF) {
			return deepest
		}
		if err != nil {
			return deepest // a number beyond float64 ends it; the test documents have none that deep
		}
		switch token {
		case json.Delim('{'), json.Delim('['):
			depth++
			deepest = max(deepest, depth)
		case json.Delim('}'), json.Delim(']'):
			depth--
		}
	}
}

func sameValue(a, b expr.Value) bool {
	return a.Kind == b.Kind && a.True == b.True && math.Float64bits(a.Num) == math.Float64bits(b.Num) && bytes.Equal(a.Text, b.Text)
}

func show(v expr.Value) string { return fmt.Sprintf("{%d %v %v %q}", v.Kind, v.True, v.Num, v.Text) }

// agree checks one line against the oracle. d may be old: earlier lines must not show.
func agree(t interface{ Fatalf(string, ...any) }, d *JSON, line []byte) {
	want, ok := oracle(line, oracleFields)
	rec := make(expr.Record, len(oracleFields))
	for i := range rec {
		rec[i] = expr.Value{Kind: expr.Text, True: true, Num: 9, Text: []byte("stale")}
	}
	kept := bytes.Clone(line)
	err := d.Decode(line, rec)
	if !bytes.Equal(line, kept) {
		t.Fatalf("%q was changed to %q", kept, line)
	}
	if (err == nil) != ok {
		t.Fatalf("%q: got error %v, but the oracle's verdict is %v", line, err, ok)
	}
	var fault *Fault
	if err != nil && (!errors.As(err, &fault) || fault.Why == "" || fault.Offset < 0 || fault.Offset > len(line)) {
		t.Fatalf("%q: %#v is no proper fault", line, err)
	}
	for i, f := range oracleFields {
		var w expr.Value
		if ok {
			w = want[i]
		}
		if !sameValue(rec[i], w) {
			t.Fatalf("%q: field %q: got %s, want %s", line, f.Path, show(rec[i]), show(w))
		}
	}
}

func FuzzJSON(f *testing.F) {
	for _, line := range []string{
		`{"id": "h0058", "ts": "2026-03-03T06:21:38.098Z", "amount": 208.41, "ms": 910.0}`,
		`{"order":{"total":1e3,"to":{"port":"N\u00f8r\"d"}},"order.total":7,"a.b":null}`,
		`{"order.to.port":[1,{"x":[]},""],"a":{"b":"\ud83d\ude00","c":{}}}`,
		`{"order":{"total":1},"order":{"to":null},"id":1,"id":true}`,
		`{"id":"\udc00\ud800"}`, `{"id":"` + "\xe3\x81" + `"}`, `["id"]`, ` {"ms":-0,"amount":1e400} `,
		`{"überfahrt":"über","ü":{"ß":12345678901234567890123}}`, `{"passenger_first_name":"Mæ","passenger_other_name":"\t"}`,
		`{"amount":17976931348623157e292,"ms":4.9e-324}`, `{"":[[[]]],"i\u0064":"x",}`, `{"id":tru}`, `{"id":01}`,
	} {
		f.Add([]byte(line))
	}
	d := NewJSON(oracleFields)
	f.Fuzz(func(t *testing.T, line []byte) { agree(t, d, line) })
}
