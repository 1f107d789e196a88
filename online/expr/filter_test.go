package expr

import (
	"fmt"
	"math"
	"reflect"
	"slices"
	"testing"
)

// event builds a record for fields from Go values; what is not named is absent.
func event(f *Fields, values map[string]any) Record {
	rec := make(Record, len(f.Names()))
	for i, name := range f.Names() {
		switch v := values[name].(type) {
		case float64:
			rec[i] = Value{Kind: Number, Num: v, Text: fmt.Append(nil, v)}
		case int:
			rec[i] = Value{Kind: Number, Num: float64(v), Text: fmt.Append(nil, v)}
		case string:
			rec[i] = Value{Kind: Text, Text: []byte(v)}
		case bool:
			rec[i] = Value{Kind: Bool, True: v, Text: fmt.Append(nil, v)}
		case []any:
			rec[i] = Value{Kind: Other, Text: []byte("[]")}
		}
	}
	return rec
}

type fields = map[string]any

func TestFilterMeaning(t *testing.T) {
	for _, tt := range []struct {
		src    string
		values fields
		want   bool
	}{
		{`type == "ticket" && ms > 800`, fields{"type": "ticket", "ms": 801}, true},
		{`type == "ticket" && ms > 800`, fields{"type": "ticket", "ms": 800}, false},
		{`type == "ticket" && ms > 800`, fields{"type": "visit", "ms": 801}, false},
		{`type == "ticket" && ms > 800`, fields{"type": "ticket"}, false},

		// absent, by Kleene's logic
		{`a > 1`, fields{}, false},
		{`!(a > 1)`, fields{}, false},
		{`a > 1 || b > 1`, fields{"b": 2}, true},
		{`b > 1 || a > 1`, fields{"b": 2}, true},
		{`!(a > 1 && b > 1)`, fields{"b": 0}, true},
		{`!(a > 1 || b > 1)`, fields{"b": 0}, false},
		{`a == b`, fields{}, false},
		{`a != b`, fields{"b": 1}, false},
		{`(a > 1) ?? true`, fields{}, true},
		{`(a > 1) ?? true`, fields{"a": 0}, false},

		// ?? gives a value only to what is absent
		{`(a ?? 3) > 2`, fields{}, true},
		{`(a ?? 3) > 2`, fields{"a": 1}, false},
		{`(a ?? 3) > 2`, fields{"a": "x"}, false},
		{`(a ?? b ?? 3) == 2`, fields{"b": 2}, true},
		{`(coupon ?? "") == ""`, fields{}, true},
		{`(coupon ?? "") == ""`, fields{"coupon": "HARBOUR"}, false},

		// types do not mix
		{`a == "1"`, fields{"a": 1}, false},
		{`a != "1"`, fields{"a": 1}, false},
		{`!(a == "1")`, fields{"a": 1}, true},
		{`a == 1`, fields{"a": true}, false},
		{`a == b`, fields{"a": 1, "b": "1"}, false},
		{`a != b`, fields{"a": 1, "b": "1"}, false},
		{`a == b`, fields{"a": []any{}, "b": []any{}}, false},
		{`a == b`, fields{"a": "x", "b": "x"}, true},
		{`a < b`, fields{"a": "x", "b": "xa"}, true},
		{`a == b`, fields{"a": true, "b": true}, true},
		{`a != b`, fields{"a": true, "b": false}, true},
		{`a <= b`, fields{"a": true, "b": true}, false}, // no order
		{`a < b`, fields{"a": false, "b": true}, false},
		{`member == true`, fields{"member": true}, true},
		{`member != true`, fields{"member": false}, true},
		{`member != true`, fields{"member": 0}, false},

		// a bool is a condition
		{`member`, fields{"member": true}, true},
		{`member`, fields{"member": false}, false},
		{`!member`, fields{"member": false}, true},
		{`member`, fields{"member": "true"}, false},
		{`member`, fields{"member": 1}, false},
		{`!member`, fields{"member": 1}, true},
		{`!member`, fields{}, false},
		{`member && type == "x"`, fields{"member": true, "type": "x"}, true},
		{`not member or false`, fields{"member": false}, true},
		{`true`, fields{}, true},

		// texts by bytes
		{`port >= "Ö"`, fields{"port": "Z"}, false},
		{`port == 'O\'Hara'`, fields{"port": "O'Hara"}, true},
		{`port < "b"`, fields{"port": "a"}, true},
		{`"b" > port`, fields{"port": "a"}, true},
		{`port == ""`, fields{"port": ""}, true},

		// numbers
		{`ms > 1e3`, fields{"ms": math.Inf(1)}, true},
		{`-2 ** 2 == a`, fields{"a": -4}, true},
		{`2 ** 3 ** 2 == a`, fields{"a": 512}, true},
		{`0x10 == a && 1_000 < b`, fields{"a": 16, "b": 1001}, true},
		{`amount * 2 > 5`, fields{"amount": 3}, true},
		{`amount * 2 > 5`, fields{"amount": "3"}, false},
		{`amount * 2 != 5`, fields{"amount": "3"}, false},
		{`amount / b != 5`, fields{"amount": 3, "b": 0}, false},
		{`amount * (class == "first") > 5`, fields{"amount": 9, "class": "first"}, true},
		{`min(a, b, 3) == 3`, fields{"a": 4, "b": 5}, true},
		{`max(a, b) == 5 && abs(c) == 1 && sqrt(b + 4) == 3 && exp(log(a)) < 5`, fields{"a": 4, "b": 5, "c": -1}, true},

		// lists
		{`port in ["a", "b"]`, fields{"port": "b"}, true},
		{`port in ["a", "b"]`, fields{"port": "c"}, false},
		{`port in ["a", "b"]`, fields{"port": 1}, false},
		{`port not in ["a", "b"]`, fields{"port": "c"}, true},
		{`port not in ["a", "b"]`, fields{"port": 1}, false}, // as != between types
		{`port not in ["a", "b"]`, fields{}, false},
		{`!(port in ["a", "b"])`, fields{"port": 1}, true},
		{`deck in [1, 2, -3]`, fields{"deck": -3}, true},
		{`deck + 1 in [2]`, fields{"deck": 1}, true},
		{`port in ["1","2","3","4","5","6","7","8","nine"]`, fields{"port": "nine"}, true},
		{`port in ["1","2","3","4","5","6","7","8","nine"]`, fields{"port": "ten"}, false},

		// names
		{`order.total > 5`, fields{"order.total": 6}, true},
		{`field("order").total > 5`, fields{"order.total": 6}, true},
		{`field("odd name") == "x"`, fields{"odd name": "x"}, true},
		{`count > 1 && sum > 1 && min > 1 && first > 1 && any && filter == 2 && len == 3`,
			fields{"count": 2, "sum": 2, "min": 2, "first": 2, "any": true, "filter": 2, "len": 3}, true},
		{`if == 1 && else == 2 && now == 3 && field == 4`, fields{"if": 1, "else": 2, "now": 3, "field": 4}, true},
		{"a == 1 // only these\n", fields{"a": 1}, true},
	} {
		var f Fields
		filter, err := ParseFilter(tt.src, &f)
		if err != nil {
			t.Errorf("%s: %v", tt.src, err)
			continue
		}
		if got := filter.Match(event(&f, tt.values)); got != tt.want {
			t.Errorf("%s over %v = %v, want %v", tt.src, tt.values, got, tt.want)
		}
	}
}

func TestOperandMeaning(t *testing.T) {
	for _, tt := range []struct {
		src    string
		values fields
		want   float64
		status Status
	}{
		{`amount * 2`, fields{"amount": 3}, 6, Present},
		{`amount`, fields{"amount": 3}, 3, Present},
		{`amount`, fields{}, 0, Missing},
		{`amount`, fields{"amount": "3"}, 0, WrongType},
		{`amount`, fields{"amount": []any{}}, 0, WrongType},
		{`amount`, fields{"amount": math.Inf(1)}, 0, NotFinite},
		{`amount`, fields{"amount": true}, 0, WrongType},
		{`amount`, fields{"amount": false}, 0, WrongType},
		{`amount ?? 7`, fields{}, 7, Present},
		{`amount ?? 7`, fields{"amount": "x"}, 0, WrongType},
		{`amount ?? backup`, fields{"backup": 4}, 4, Present},
		{`amount / rate`, fields{"amount": 3, "rate": 0}, 0, NotFinite},
		{`amount / rate`, fields{"amount": 3, "rate": "x"}, 0, WrongType},
		{`amount / rate`, fields{"rate": "x"}, 0, Missing},
		{`log(amount) + rate`, fields{"amount": -1, "rate": "x"}, 0, WrongType},
		{`(amount / rate) ?? 1`, fields{"amount": 3, "rate": 0}, 0, NotFinite}, // not absent
		{`amount * 1e300`, fields{"amount": 1e300}, 0, NotFinite},
		{`amount > 5`, fields{"amount": 6}, 1, Present},
		{`amount > 5`, fields{"amount": 5}, 0, Present},
		{`amount > 5`, fields{"amount": "x"}, 0, Present},
		{`amount > 5`, fields{}, 0, Missing},
		{`amount * (class == "first")`, fields{"amount": 6, "class": "second"}, 0, Present},
		{`1`, fields{}, 1, Present},
		{`true`, fields{}, 1, Present},
	} {
		var f Fields
		o, err := ParseValue(tt.src, &f)
		if err != nil {
			t.Errorf("%s: %v", tt.src, err)
			continue
		}
		if v, s := o.Eval(event(&f, tt.values)); v != tt.want || s != tt.status {
			t.Errorf("%s over %v = %v %v, want %v %v", tt.src, tt.values, v, s, tt.want, tt.status)
		}
	}
}

func TestSlots(t *testing.T) {
	var f Fields
	f.Slot("time")
	filter, err := ParseFilter(`b == 1 && (a > 2 || b < 3) && time != ""`, &f)
	if err != nil {
		t.Fatal(err)
	}
	if want := []string{"time", "b", "a"}; !slices.Equal(f.Names(), want) {
		t.Errorf("fields %v, want %v", f.Names(), want)
	}
	if want := []int{0, 1, 2}; !slices.Equal(filter.Slots(), want) {
		t.Errorf("slots %v, want %v", filter.Slots(), want)
	}
	for _, tt := range []struct {
		src  string
		slot int // -1: no bare field
	}{
		{"a", 2}, {"+a", 2}, {"order.total", 3}, {`field("odd name")`, 4}, {"a * 1", -1}, {"a ?? 0", -1}, {"3", -1},
	} {
		o, err := ParseValue(tt.src, &f)
		if err != nil {
			t.Fatal(err)
		}
		if slot, ok := o.Field(); ok != (tt.slot >= 0) || ok && (slot != tt.slot || !slices.Equal(o.Slots(), []int{tt.slot})) {
			t.Errorf("%s is field %d, %v, over %v, want %d", tt.src, slot, ok, o.Slots(), tt.slot)
		}
	}
}

func TestFaultsLeaveFieldsAlone(t *testing.T) {
	var f Fields
	f.Slot("time")
	if _, err := ParseFilter(`a == 1 && 1 == "x"`, &f); err == nil {
		t.Error("no error")
	}
	if _, err := ParseValue(`a + "x"`, &f); err == nil {
		t.Error("no error")
	}
	if !slices.Equal(f.Names(), []string{"time"}) {
		t.Errorf("fields %v, want time alone", f.Names())
	}
}

func TestUses(t *testing.T) {
	for src, want := range map[string]map[string]Uses{
		`a == "x" && b > 1`:          {"a": AsText, "b": AsNumber},
		`a && !b`:                    {"a": AsBool, "b": AsBool},
		`a == "x" || a > 1`:          {"a": AsText | AsNumber},
		`a == b`:                     {"a": AsNumber, "b": AsNumber},
		`a == true`:                  {"a": AsBool},
		`(a ?? "") == b`:             {"a": AsText, "b": AsText},
		`(a ?? b ?? 3) > 0`:          {"a": AsNumber, "b": AsNumber},
		`a in ["x"] && b not in [1]`: {"a": AsText, "b": AsNumber},
		`max(a, b * 2) > 1`:          {"a": AsNumber, "b": AsNumber},
		`(a ?? false) && b ** 2 > 1`: {"a": AsBool, "b": AsNumber},
	} {
		var f Fields
		if _, err := ParseFilter(src, &f); err != nil {
			t.Errorf("%s: %v", src, err)
		}
		got := map[string]Uses{}
		for i, name := range f.Names() {
			got[name] = f.Uses(i)
		}
		if !reflect.DeepEqual(got, want) {
			t.Errorf("%s uses %v, want %v", src, got, want)
		}
	}
	var f Fields
	if _, err := ParseValue("amount", &f); err != nil || f.Uses(0) != AsNumber {
		t.Errorf("a tallied field is used as %v, %v", f.Uses(0), err)
	}
}
