package decode

import (
	"fmt"
	"math"
	"math/big"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"stillwell/online/expr"
)

func text(s string) expr.Value { return expr.Value{Kind: expr.Text, Text: []byte(s)} }

// Against time.Parse, which is laxer in the form (a comma before the fraction, an hour of one digit) and
// knows neither lower case, nor a space, nor leap seconds.
func TestTimesAgreeWithTimeParse(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		for range 50 {
			at := time.Unix(rapid.Int64Range(-62135596800, 253402300799).Draw(t, "seconds"), 0).UTC()
			if rapid.IntRange(0, 3).Draw(t, "near") > 0 { // where int64 reaches
				at = time.Unix(0, rapid.Int64().Draw(t, "nanos")).UTC().Truncate(time.Second)
			}
			s := at.Format("2006-01-02T15:04:05")
			if rapid.Bool().Draw(t, "odd") { // also days and hours that do not exist
				b := []byte(s)
				i := rapid.SampledFrom([]int{5, 6, 8, 9, 11, 12, 14, 15, 17, 18}).Draw(t, "place")
				b[i] = rapid.SampledFrom([]byte("0123456789:")).Draw(t, "digit")
				s = string(b)
			}
			if s[17:19] == "60" {
				continue
			}
			s += rapid.StringMatching(`(\.[0-9]{1,12})?`).Draw(t, "fraction")
			s += rapid.OneOf(rapid.Just("Z"), rapid.StringMatching(`[+-](0[0-9]|1[0-9]|2[0-3]):[0-5][0-9]`), rapid.StringMatching(`Z?[+-]?[0-9]?[0-9]?:?[0-9]{0,2}`)).Draw(t, "zone")
			want, err := time.Parse(time.RFC3339Nano, s)
			if err == nil && strings.Contains(s, "+24:") || strings.Contains(s, "-24:") {
				continue // time.Parse lets an offset of 24 hours pass
			}
			got, fault := ParseTime(text(s), RFC3339)
			switch {
			case err != nil:
				if fault == nil {
					t.Fatalf("%s: got %d, the oracle says %v", s, got, err)
				}
			case want.Before(time.Unix(0, math.MinInt64)) || want.After(time.Unix(0, math.MaxInt64)):
				if fault == nil || fault.Kind != OutOfRange {
					t.Fatalf("%s: got %d, %v, want out of range", s, got, fault)
				}
			case fault != nil || got != want.UnixNano():
				t.Fatalf("%s: got %d, %v, want %d", s, got, fault, want.UnixNano())
			}
		}
	})
}

// Every day that int64 reaches, and the ones around every change of century.
func TestEveryDay(t *testing.T) {
	last := time.Date(2262, 4, 11, 0, 0, 0, 0, time.UTC)
	for day := time.Date(1677, 9, 22, 0, 0, 0, 0, time.UTC); !day.After(last); day = day.AddDate(0, 0, 1) {
		if got, fault := ParseTime(text(day.Format(time.RFC3339)), RFC3339); fault != nil || got != day.UnixNano() {
			t.Fatalf("%s: got %d, %v, want %d", day, got, fault, day.UnixNano())
		}
	}
}

func TestTimes(t *testing.T) {
	at := func(s string) int64 {
		when, err := time.Parse(time.RFC3339Nano, s)
		if err != nil {
			t.Fatal(err)
		}
		return when.UnixNano()
	}
	for _, tt := range []struct {
		text string
		want int64
	}{
		{"1970-01-01T00:00:00Z", 0},
		{"1969-12-31T23:59:59.999999999Z", -1},
		{"2026-03-03t06:21:38.098z", at("2026-03-03T06:21:38.098Z")},
		{"2026-03-03 06:21:38+00:00", at("2026-03-03T06:21:38Z")},
		{"2026-03-03T06:21:38-00:00", at("2026-03-03T06:21:38Z")},
		{"2026-03-03T06:21:38.1234567899999999999999999999Z", at("2026-03-03T06:21:38.123456789Z")},
		{"2024-02-29T23:59:59+23:59", at("2024-02-29T00:00:59Z")},
		{"1677-09-21T00:12:43.145224192Z", math.MinInt64},
		{"2262-04-11T23:47:16.854775807Z", math.MaxInt64},
		{"2262-04-11T23:47:16.8547758079Z", math.MaxInt64},
		// The leap second that ended 2016, and the same in Perth and Newfoundland.
		{"2016-12-31T23:59:60Z", at("2017-01-01T00:00:00Z")},
		{"2016-12-31T23:59:60.999Z", at("2017-01-01T00:00:00Z")},
		{"2017-01-01T07:59:60+08:00", at("2017-01-01T00:00:00Z")},
		{"2016-12-31T20:29:60.5-03:30", at("2017-01-01T00:00:00Z")},
	} {
		if got, fault := ParseTime(text(tt.text), RFC3339); fault != nil || got != tt.want {
			t.Errorf("%s: got %d, %v, want %d", tt.text, got, fault, tt.want)
		}
	}
	for _, tt := range []struct {
		text string
		kind FaultKind
	}{
		{"", BadTime}, {"2026", BadTime}, {"2026-03-03", BadTime}, {"2026-03-03T06:21:38", BadTime}, {"2026-03-03T06:21Z", BadTime},
		{"2026-03-03T06:21:38.Z", BadTime}, {"2026-03-03T06:21:38,5Z", BadTime}, {"2026-03-03T06:21:38ZZ", BadTime}, {"2026-03-03T06:21:38 Z", BadTime},
		{"2026-03-03T06:21:38+0100", BadTime}, {"2026-03-03T06:21:38+01", BadTime}, {"2026-03-03T06:21:38+24:00", BadTime}, {"2026-03-03T06:21:38+01:60", BadTime},
		{"2026-02-29T00:00:00Z", BadTime}, {"1900-02-29T00:00:00Z", BadTime}, {"2026-04-31T00:00:00Z", BadTime}, {"2026-00-01T00:00:00Z", BadTime}, {"2026-13-01T00:00:00Z", BadTime},
		{"2026-01-00T00:00:00Z", BadTime}, {"2026-01-01T24:00:00Z", BadTime}, {"2026-01-01T00:60:00Z", BadTime}, {"2026-01-01T23:59:61Z", BadTime}, {"2026-01-01T22:59:60Z", BadTime},
		{"2026-01-01T23:59:60+01:00", BadTime}, {"2026/03/03T06:21:38Z", BadTime}, {"2026-03-03x06:21:38Z", BadTime}, {"-026-03-03T06:21:38Z", BadTime}, {"1772518898", BadTime},
		{"0000-01-01T00:00:00Z", OutOfRange}, {"9999-12-31T23:59:59Z", OutOfRange}, {"1677-09-21T00:12:43.145224191Z", OutOfRange}, {"2262-04-11T23:47:16.854775808Z", OutOfRange}, {"2262-04-11T23:47:17Z", OutOfRange},
	} {
		if got, fault := ParseTime(text(tt.text), RFC3339); fault == nil || fault.Kind != tt.kind {
			t.Errorf("%s: got %d, %v, want %v", tt.text, got, fault, tt.kind)
		}
	}
	for _, v := range []expr.Value{{}, {Kind: expr.Number, Num: 1, Text: []byte("1")}, {Kind: expr.Bool}, {Kind: expr.Other, Text: []byte("[]")}} {
		if _, fault := ParseTime(v, RFC3339); fault == nil || fault.Kind != BadTime {
			t.Errorf("kind %d: got %v", v.Kind, fault)
		}
	}
}

var unitExponent = map[TimeSpec]int64{UnixSeconds: 9, UnixMillis: 6, UnixMicros: 3, UnixNanos: 0}

// exactNanos works the same out with fractions: the largest integer not above.
func exactNanos(s string, spec TimeSpec) (nanos int64, ok bool) {
	r, valid := new(big.Rat).SetString(s)
	if !valid {
		panic(s)
	}
	unit := new(big.Int).Exp(big.NewInt(10), big.NewInt(unitExponent[spec]), nil)
	r.Mul(r, new(big.Rat).SetInt(unit))
	whole := new(big.Int).Div(r.Num(), r.Denom()) // Euclidean, and so toward the past
	return whole.Int64(), whole.IsInt64()
}

func TestUnixTimesAreExact(t *testing.T) {
	gen := rapid.OneOf(
		rapid.StringMatching(`-?(0|[1-9][0-9]{0,20})(\.[0-9]{1,25})?([eE][+-]?[0-9]{1,2})?`),
		rapid.StringMatching(`-?17[0-9]{8}(\.[0-9]{1,12})?`),
		rapid.StringMatching(`-?9223372036\.?854775[78][0-9]{2}\.?[0-9]{0,3}`).Filter(func(s string) bool { return strings.Count(s, ".") < 2 && !strings.HasSuffix(s, ".") }),
		rapid.StringMatching(`-?0\.0{0,12}[0-9]{1,22}e[0-9]{1,2}`),
	)
	rapid.Check(t, func(t *rapid.T) {
		for range 50 {
			s := gen.Draw(t, "number")
			spec := rapid.SampledFrom([]TimeSpec{UnixSeconds, UnixMillis, UnixMicros, UnixNanos}).Draw(t, "spec")
			checkUnix(t, s, spec)
		}
	})
	for _, s := range []string{"0", "-0", "1772518898.098", "1.772518898098e9", "-0.0000000001", "-1e-400", "9223372036.854775807", "9223372036.854775808",
		"-9223372036.854775808", "-9223372036.8547758081", "9223372036854775807", "9223372036854775808", "-9223372036854775808", "-9223372036854775809", "9223372036854775807.9999999999999999999999",
		"-9223372036854775807.00000000000000000000001", "1e11", "1e14", "1e17", "1e18", "1e19", "1e20", "1e30", "0.00000000000000000000000001e30", "18446744073709551616", "100000000000000000000000e-10", "0.09999999999999999999", "-0.09999999999999999999", "9.999999999999999999999e18", "-9.999999999999999999999e18"} {
		for spec := range unitExponent {
			checkUnix(t, s, spec)
		}
	}
}

func checkUnix(t interface{ Fatalf(string, ...any) }, s string, spec TimeSpec) {
	want, ok := exactNanos(s, spec)
	for _, kind := range []expr.Kind{expr.Number, expr.Text} {
		got, fault := ParseTime(expr.Value{Kind: kind, Text: []byte(s)}, spec)
		if ok && (fault != nil || got != want) || !ok && (fault == nil || fault.Kind != OutOfRange) {
			t.Fatalf("%s, spec %d: got %d, %v, want %d, %v", s, spec, got, fault, want, ok)
		}
	}
}

func TestUnixTimeFaults(t *testing.T) {
	for _, v := range []expr.Value{{}, text(""), text("x"), text("2026-03-03T06:21:38Z"), text("1 "), text("NaN"), {Kind: expr.Bool, Text: []byte("true")}, {Kind: expr.Other, Text: []byte("{}")}} {
		if got, fault := ParseTime(v, UnixMillis); fault == nil || fault.Kind != BadTime {
			t.Errorf("%s: got %d, %v", show(v), got, fault)
		}
	}
	if _, fault := ParseTime(text("1e999999999999999999"), UnixNanos); fault == nil || fault.Kind != OutOfRange {
		t.Errorf("got %v", fault)
	}
	if got, fault := ParseTime(text("1e-999999999999999999"), UnixSeconds); fault != nil || got != 0 {
		t.Errorf("got %d, %v", got, fault)
	}
}

func TestUnixTimeUnits(t *testing.T) {
	for unit, want := range map[string]time.Duration{"s": time.Second, "ms": time.Millisecond, "us": time.Microsecond, "ns": time.Nanosecond} {
		spec, ok := UnixTime(unit)
		if got, fault := ParseTime(text("1"), spec); !ok || fault != nil || got != int64(want) {
			t.Errorf("one %s: got %d, %v", unit, got, fault)
		}
	}
	if _, ok := UnixTime("m"); ok {
		t.Error("minutes are no unit")
	}
}

func FuzzParseTime(f *testing.F) {
	for _, s := range []string{"2026-03-03T06:21:38.098Z", "2016-12-31T23:59:60Z", "2026-03-03 06:21:38-03:30", "1772518898.098", "-1e-9", "18446744073709551616e-1"} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, s []byte) {
		v := expr.Value{Kind: expr.Text, Text: s}
		if nanos, fault := ParseTime(v, RFC3339); fault == nil {
			// What is accepted is a time that time.Parse reads the same way, once in capitals.
			plain := strings.ToUpper(strings.Replace(string(s), " ", "T", 1))
			if plain[17:19] == "60" {
				return
			}
			if want, err := time.Parse(time.RFC3339Nano, plain); err != nil || want.UnixNano() != nanos {
				t.Fatalf("%q: got %d, want %v, %v", s, nanos, want, err)
			}
		}
		for spec := range unitExponent {
			d, end, form := scanDecimal(s, 0)
			if form == notNumber || end < len(s) {
				if _, fault := ParseTime(v, spec); fault == nil {
					t.Fatalf("%q is no number, but passed", s)
				}
			} else if d.exp > -1000 && d.exp < 1000 && form == strict {
				checkUnix(t, string(s), spec)
			}
		}
	})
}

func ExampleParseTime() {
	nanos, _ := ParseTime(expr.Value{Kind: expr.Text, Text: []byte("2026-03-03T06:21:38.098Z")}, RFC3339)
	fmt.Println(nanos)
	_, fault := ParseTime(expr.Value{Kind: expr.Text, Text: []byte("2026-03-03T06:21:38")}, RFC3339)
	fmt.Println(fault)
	// Output:
	// 1772518898098000000
	// bad time: the time does not end in Z or an offset such as +01:00
}
