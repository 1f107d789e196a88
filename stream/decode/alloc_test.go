package decode

import (
	"strings"
	"testing"

	"stillwell/online/expr"
)

// Neither good lines nor a flood of bad ones may cost memory, once the decoder's
// buffer has its size.
func TestNoAllocation(t *testing.T) {
	j := NewJSON(ferryFields)
	c, err := NewCSV(ferryFields, CSVOptions{})
	if err != nil {
		t.Fatal(err)
	}
	if err := c.Header([]byte("id,amount,ms,note")); err != nil {
		t.Fatal(err)
	}
	deep := strings.Repeat("[", 100_000)
	lines := map[string]struct {
		d     Decoder
		lines []string
	}{
		"json": {j, []string{
			`{"id": "h0058", "ts": "2026-03-03T06:21:38.098Z", "type": "visit", "amount": 208.41, "ms": 910.0}`,
			`{"id":"h\u00e9","i\u0064":"\ud83d\ude00","amount":12345678901234567890.25,"ms":1e-310}`,
			`{"amount":1e400,"ms":-1.8e308}`, `{"amount":1e309,"ms":` + beyondMax + `}`, `{"amount":1e310,"x":{"y":[1,2,{}]},"platform":{"z":[]}}`,
			``, `[1]`, `{"id":"` + "\xff" + `"}`, `{"id":"\ud800"}`, `{"id":` + deep, `{"id":1`, `{"amount":--1}`,
		}},
		"csv": {c, []string{
			`h0058,208.41,910.0,plain`, `h0058,1e400,-1.8e308,"said ""no"", twice"`, `"h""1", 12 ,,`,
			``, `a,b`, `a,b,c,d,e`, `"a`, `a"b,1,2,3`, "\xff,1,2,3",
		}},
	}
	rec := make(expr.Record, len(ferryFields))
	for name, tt := range lines {
		for _, line := range tt.lines {
			bytes := []byte(line)
			if n := testing.AllocsPerRun(100, func() { _ = tt.d.Decode(bytes, rec) }); n != 0 {
				t.Errorf("%s %.40q: %v allocations", name, line, n)
			}
		}
	}
	if cap(j.scratch) > 1<<10 || cap(c.scratch) > 1<<10 {
		t.Errorf("the buffers have grown to %d and %d bytes", cap(j.scratch), cap(c.scratch))
	}
	for _, text := range []string{"2026-03-03T06:21:38.098Z", "2026-03-03T06:21:38", "9999-12-31T00:00:00Z", "1772518898.098", "1e99", "x"} {
		v := expr.Value{Kind: expr.Text, Text: []byte(text)}
		for spec := RFC3339; spec <= UnixNanos; spec++ {
			if n := testing.AllocsPerRun(100, func() { _, _ = ParseTime(v, spec) }); n != 0 {
				t.Errorf("time %s, spec %d: %v allocations", text, spec, n)
			}
		}
	}
}
