package decode

import (
	"errors"
	"fmt"
	"math"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"stillwell/online/expr"
)

// A document is generated as text, so that notation varies as well as content.
func genSpace(t *rapid.T) string {
	return rapid.SampledFrom([]string{"", "", "", " ", "  ", "\t", "\r", " \n "}).Draw(t, "space")
}

var genCharacter = rapid.SampledFrom([]string{
	"a", "b", "Z", "0", " ", ".", "/", "'", "{", "]", ":", ",", "ø", "ß", "岸", "🛳", "\u007f", "\u2028", "\ufffd",
	`\"`, `\\`, `\/`, `\b`, `\f`, `\n`, `\r`, `\t`, `\u0000`, `\u00e9`, `\u00E9`, `\u2028`, `\ud83d\ude00`, `\uDBFF\uDFFF`, `\ufffd`, `\uFFFF`,
})

var genBadCharacter = rapid.SampledFrom([]string{
	"\x00", "\x1f", "\n", "\xff", "\x80", "\xc0\xaf", "\xed\xa0\x80", "\xf4\x90\x80\x80", "\xe5\xb2", `\x`, `\u12`, `\u12g4`, `\ud83d`, `\ude00`, `\ud83d\u0041`, `\ud83d\ud83d`, `"`, `\`,
})

func genString(t *rapid.T) string {
	text := strings.Join(rapid.SliceOfN(genCharacter, 0, 20).Draw(t, "text"), "")
	if rapid.IntRange(0, 79).Draw(t, "bad") == 0 {
		text += genBadCharacter.Draw(t, "bad character") + strings.Repeat("x", rapid.IntRange(0, 9).Draw(t, "after"))
	}
	return `"` + text + `"`
}

func genNumber(t *rapid.T) string {
	return rapid.OneOf(
		rapid.StringMatching(`-?(0|[1-9][0-9]{0,20})(\.[0-9]{1,22})?([eE][+-]?[0-9]{1,3})?`),
		rapid.SampledFrom([]string{"0", "-0", "1e400", "-1e400", "1e-400", "0e9999999999", "9007199254740993", "1.7976931348623158e308", "1.7976931348623159e308",
			"01", "-", "+1", ".5", "5.", "1e", "1e+", "0x1", "1_0", "NaN", "Infinity", "--1", "1.e3"}),
	).Draw(t, "number")
}

func genKey(t *rapid.T) string {
	return rapid.OneOf(
		rapid.SampledFrom([]string{`"id"`, `"ts"`, `"amount"`, `"ms"`, `"order"`, `"total"`, `"to"`, `"port"`, `"order.total"`, `"order.to.port"`, `"a"`, `"b"`, `"a.b"`, `"a.b.c"`, `""`,
			`"i\u0064"`, `"\u0061"`, `"order\u002etotal"`, `"passenger_first_name"`, `"passenger_other_name"`, `"passenger_wrong_name"`, `"überfahrt"`, `"\u00fcberfahrt"`, `"ü"`, `"ß"`, `"ü.ß"`}),
		rapid.Custom(genString),
	).Draw(t, "key")
}

func genValue(t *rapid.T, depth int) string {
	kinds := 8
	if depth > 3 {
		kinds = 5
	}
	switch rapid.IntRange(0, kinds).Draw(t, "kind") {
	case 0, 1:
		return genString(t)
	case 2, 3:
		return genNumber(t)
	case 4:
		return rapid.SampledFrom([]string{"true", "false", "null", "null", "null"}).Draw(t, "word")
	case 5:
		return rapid.SampledFrom([]string{"{}", "[]", "{ }", "[ ]", "true", "false", "tru", "nul", "True", ""}).Draw(t, "small")
	case 6:
		var items []string
		for range rapid.IntRange(0, 3).Draw(t, "items") {
			items = append(items, genSpace(t)+genValue(t, depth+1)+genSpace(t))
		}
		return "[" + strings.Join(items, ",") + "]"
	}
	return genObject(t, depth+1)
}

func genObject(t *rapid.T, depth int) string {
	var members []string
	for range rapid.IntRange(0, 6).Draw(t, "members") {
		members = append(members, genSpace(t)+genKey(t)+genSpace(t)+":"+genSpace(t)+genValue(t, depth)+genSpace(t))
	}
	return "{" + strings.Join(members, ",") + "}"
}

// damage spoils a document in one place, often enough.
func damage(t *rapid.T, line string) string {
	if len(line) == 0 {
		return line
	}
	at := rapid.IntRange(0, len(line)-1).Draw(t, "at")
	switch rapid.IntRange(0, 9).Draw(t, "damage") {
	case 0:
		return line[:at]
	case 1:
		return line[:at] + line[at+1:]
	case 2:
		return line[:at] + rapid.SampledFrom([]string{",", ":", "}", "]", "{", "[", `"`, `\`, "\x00", "\xff", "0", "e", " "}).Draw(t, "insert") + line[at:]
	case 3:
		return line + rapid.SampledFrom([]string{"}", " x", "{}", ",", "\x00"}).Draw(t, "tail")
	}
	return line
}

func TestJSONAgreesWithOracle(t *testing.T) {
	d := NewJSON(oracleFields)
	accepted, checked := 0, 0
	rapid.Check(t, func(t *rapid.T) {
		for range 60 {
			line := []byte(damage(t, genSpace(t)+genObject(t, 0)+genSpace(t)))
			checked++
			if _, ok := oracle(line, oracleFields); ok {
				accepted++
			}
			agree(t, d, line)
		}
	})
	if share := float64(accepted) / float64(checked); share < 0.2 || share > 0.8 {
		t.Errorf("%.0f%% of the documents were valid: the generator no longer tries both sides", 100*share)
	}
}

// Every proper prefix of an object is a fault, and so is one with a byte too many.
func TestJSONRefusesTruncation(t *testing.T) {
	const line = `{"id":"h\u00e9\"","amount":-1.5e+3,"order":{"total":[1,true,null,{"x":"岸"}]},"ms":0}`
	d := NewJSON(oracleFields)
	for i := range line {
		agree(t, d, []byte(line[:i]))
		if d.Decode([]byte(line[:i]), make(expr.Record, len(oracleFields))) == nil {
			t.Errorf("accepted the first %d bytes of %d", i, len(line))
		}
	}
	agree(t, d, []byte(line))
	agree(t, d, []byte(line+"}"))
}

// Strings of every length, with the special byte at every place in its word.
func TestJSONStringsAtEveryOffset(t *testing.T) {
	d := NewJSON(oracleFields)
	for length := range 40 {
		for at := range length {
			for _, c := range []string{`\n`, `\"`, `"`, "\x1f", "\x00", " ", "!", "\x7f", "ø", "\x80", "\xff", `\`} {
				text := strings.Repeat("#", at) + c + strings.Repeat("[", length-at)
				agree(t, d, []byte(`{"id":"`+text+`"}`))
				agree(t, d, []byte(`{"`+text+`":1,"amount":2}`))
			}
		}
	}
}

func TestJSONFaults(t *testing.T) {
	for _, tt := range []struct {
		line   string
		kind   FaultKind
		offset int
	}{
		{``, Syntax, 0},
		{`  `, Syntax, 2},
		{`x`, Syntax, 0},
		{`}`, Syntax, 0},
		{`nul`, Syntax, 0},
		{"\ufeff{}", Syntax, 0},
		{`["not","an","object"]`, NotObject, 0},
		{` "text"`, NotObject, 1},
		{`17`, NotObject, 0},
		{`null`, NotObject, 0},
		{`{"id":1} {"id":2}`, Syntax, 9},
		{`{"id" 1}`, Syntax, 6},
		{`{"id":}`, Syntax, 6},
		{`{"id":1,}`, Syntax, 8},
		{`{,"id":1}`, Syntax, 1},
		{`{"id":1 "ts":2}`, Syntax, 8},
		{`{"id":[1}`, Syntax, 8},
		{`{"id":01}`, Syntax, 6},
		{`{"id":NaN}`, Syntax, 6},
		{`{"id":'x'}`, Syntax, 6},
		{`{"x":"a` + "\t" + `"}`, Syntax, 7},
		{`{"x":"a\q"}`, Syntax, 7},
		{`{"x":"a`, Syntax, 7},
		{`{"x":"a` + "\xff" + `"}`, UTF8, 7},
		{`{"` + "\xed\xa0\x80" + `":1}`, UTF8, 2},
		{`{"x":"\ud83d"}`, UTF8, 6},
		{`{"x":"\ude00"}`, UTF8, 6},
		{`{"x":` + strings.Repeat("[", 600), TooDeep, 5 + MaxDepth - 1},
	} {
		for _, fields := range [][]Field{nil, oracleFields, {{Path: "x"}}} {
			rec := make(expr.Record, len(fields))
			err := NewJSON(fields).Decode([]byte(tt.line), rec)
			var f *Fault
			if !errors.As(err, &f) {
				t.Errorf("%q: got %v, want a fault", tt.line, err)
			} else if f.Kind != tt.kind || f.Offset != tt.offset {
				t.Errorf("%q: got %v at %d (%v), want %v at %d", tt.line, f.Kind, f.Offset, f, tt.kind, tt.offset)
			}
		}
	}
}

func TestJSONDepth(t *testing.T) {
	nested := func(levels int) string { // the event and levels-1 within it
		arrays := (levels - 1) / 2
		objects := levels - 1 - arrays
		return `{"id":` + strings.Repeat(`{"order":`, objects) + strings.Repeat("[", arrays) + "1" +
			strings.Repeat("]", arrays) + strings.Repeat("}", objects) + "}"
	}
	d, rec := NewJSON(oracleFields), make(expr.Record, len(oracleFields))
	if err := d.Decode([]byte(nested(MaxDepth)), rec); err != nil {
		t.Errorf("%d levels: %v", MaxDepth, err)
	}
	for _, levels := range []int{MaxDepth + 1, 100_000} {
		var f *Fault
		if err := d.Decode([]byte(nested(levels)), rec); !errors.As(err, &f) || f.Kind != TooDeep {
			t.Errorf("%d levels: got %v, want too deep", levels, err)
		}
	}
	// A wanted path may itself lead as deep.
	path := strings.Repeat("a.", 300) + "a"
	line := strings.Repeat(`{"a":`, 301) + "7" + strings.Repeat("}", 301)
	one := make(expr.Record, 1)
	if err := NewJSON([]Field{{Path: path, Numeric: true}}).Decode([]byte(line), one); err != nil || one[0].Num != 7 {
		t.Errorf("a path of 301 keys: got %s, %v", show(one[0]), err)
	}
}

func TestJSONPaths(t *testing.T) {
	for _, tt := range []struct{ line, want string }{
		{`{"order":{"total":1},"order.total":2}`, "1"},
		{`{"order.total":2,"order":{"total":1}}`, "1"},
		{`{"order.total":2,"order":{"total":null}}`, "2"},
		{`{"order.total":2,"order":{}}`, "2"},
		{`{"order.total":2,"order.total":3}`, "3"},
		{`{"order.total":2,"order.total":null}`, ""},
		{`{"order":{"total":1},"order":{}}`, ""},
		{`{"order":{"total":1},"order":5}`, ""},
		{`{"order":{"total":1,"total":4}}`, "4"},
		{`{"order":{"total":1,"total":null}}`, ""},
		{`{"order":[{"total":1}]}`, ""},
		{`{"x":{"order":{"total":1}}}`, ""},
		{`{"x":{"order.total":1}}`, ""},
		{`{"order":{"order":{"total":1}}}`, ""},
		{`{"Order":{"total":1}}`, ""},
		{`{"order":{"total":{"total":1}}}`, `{"total":1}`},
	} {
		rec := make(expr.Record, 1)
		if err := NewJSON([]Field{{Path: "order.total"}}).Decode([]byte(tt.line), rec); err != nil || string(rec[0].Text) != tt.want {
			t.Errorf("%s: got %s, %v, want %q", tt.line, show(rec[0]), err, tt.want)
		}
	}
}

// Many keys that are alike: same length, same beginning, same end.
func TestJSONManyKeys(t *testing.T) {
	var fields []Field
	var line strings.Builder
	for i := range 500 {
		fields = append(fields, Field{Path: fmt.Sprintf("passenger-%03d-of-the-morning-ferry", i)}, Field{Path: fmt.Sprintf("k%d", i)})
		fmt.Fprintf(&line, `,"passenger-%03d-of-the-morning-ferry":%d,"k%d":%d,"q%d":0`, i, 2*i, i, 2*i+1, i)
	}
	rec := make(expr.Record, len(fields))
	if err := NewJSON(fields).Decode([]byte("{"+line.String()[1:]+"}"), rec); err != nil {
		t.Fatal(err)
	}
	for i, v := range rec {
		if string(v.Text) != fmt.Sprint(i) {
			t.Errorf("%s: got %s, want %d", fields[i].Path, show(v), i)
		}
	}
}

// Short keys are compared as words filled up with zeros; a key may end in such characters itself.
func TestJSONKeysWithNUL(t *testing.T) {
	for _, name := range []string{"", "k", "id", "fare", "ms"} {
		rec := make(expr.Record, 1)
		d := NewJSON([]Field{{Path: name}})
		for n := 1; n < 9; n++ {
			line := fmt.Sprintf(`{"%s%s":1}`, name, strings.Repeat(`\u0000`, n))
			if err := d.Decode([]byte(line), rec); err != nil || rec[0].Kind != expr.Absent {
				t.Errorf("%s: got %s, %v", line, show(rec[0]), err)
			}
		}
	}
}

func TestJSONNumberOnlyWhereNumeric(t *testing.T) {
	rec := make(expr.Record, 2)
	if err := NewJSON([]Field{{Path: "a"}, {Path: "b", Numeric: true}}).Decode([]byte(`{"a":1.50,"b":1.50}`), rec); err != nil {
		t.Fatal(err)
	}
	if !math.IsNaN(rec[0].Num) || rec[1].Num != 1.5 || string(rec[0].Text) != "1.50" || string(rec[1].Text) != "1.50" {
		t.Errorf("got %s and %s", show(rec[0]), show(rec[1]))
	}
}

func TestTwoSlotsForOnePathPanic(t *testing.T) {
	defer func() {
		if recover() == nil {
			t.Error("no panic")
		}
	}()
	NewJSON([]Field{{Path: "id"}, {Path: "id"}})
}
