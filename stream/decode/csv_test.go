package decode

import (
	"bytes"
	"encoding/csv"
	"errors"
	"slices"
	"strconv"
	"strings"
	"testing"
	"unicode/utf8"

	"pgregory.net/rapid"

	"stillwell/online/expr"
)

var csvFields = []Field{{Path: "c0"}, {Path: "c1", Numeric: true}, {Path: "c2"}, {Path: "gone"}}

func newCSV(t interface {
	Fatalf(string, ...any)
}, fields []Field, opts CSVOptions, header string) *CSV {
	d, err := NewCSV(fields, opts)
	if err == nil {
		err = d.Header([]byte(header))
	}
	if err != nil {
		t.Fatalf("header %q: %v", header, err)
	}
	return d
}

// csvAgree checks one line against the standard library's package, which unlike
// this one lets broken UTF-8 pass and reads on in the next line for the end of a quoted cell.
func csvAgree(t interface{ Fatalf(string, ...any) }, d *CSV, line []byte, columns int) {
	rec := expr.Record{text("stale"), text("stale"), text("stale"), text("stale")}
	err := d.Decode(line, rec)
	r := csv.NewReader(bytes.NewReader(line))
	r.FieldsPerRecord = columns
	r.Comma = rune(d.comma)
	want, wantErr := r.Read()
	if utf8.Valid(line) && (err == nil) != (wantErr == nil) || !utf8.Valid(line) && err == nil {
		t.Fatalf("%q: got %v, the oracle says %v", line, err, wantErr)
	}
	if err != nil {
		want = nil
		var f *Fault
		if !errors.As(err, &f) || f.Why == "" || f.Offset < 0 || f.Offset > len(line) {
			t.Fatalf("%q: %#v is no proper fault", line, err)
		}
	}
	for i, v := range rec {
		var w expr.Value
		if i < 3 && i < len(want) && want[i] != "" {
			w = text(want[i])
			number := strings.Trim(want[i], " \t")
			if f, err := strconv.ParseFloat(number, 64); i == 1 && number != "" && strings.Trim(number, "0123456789+-.eE") == "" && (err == nil || errors.Is(err, strconv.ErrRange)) {
				w = expr.Value{Kind: expr.Number, Num: f, Text: []byte(number)}
			}
		}
		if !sameValue(v, w) {
			t.Fatalf("%q: cell %d: got %s, want %s", line, i, show(v), show(w))
		}
	}
}

func TestCSVAgreesWithEncodingCSV(t *testing.T) {
	three, five := newCSV(t, csvFields, CSVOptions{}, "c0,c1,c2"), newCSV(t, csvFields, CSVOptions{Comma: ';'}, "c0;c1;c2;x;y")
	accepted, checked := 0, 0
	rapid.Check(t, func(t *rapid.T) {
		cell := rapid.OneOf(
			rapid.StringMatching(`[a-z ø';\t]{0,12}`),
			rapid.StringMatching(`"([a-z, ø;\r]|""){0,12}"`),
			rapid.StringMatching(` ?[+-]?[0-9]{0,3}\.?[0-9]{0,3}(e[0-9]{1,3})? ?`),
			rapid.SampledFrom([]string{"", `""`, "true", "NaN", "inf", "0x10", "1_000", "1e400", `"7"`, `"`, `a"b`, `"a"b`, `"a`, `"a" `, ` "a"`, "\xff"}),
		)
		for range 30 {
			d, columns := three, 3
			if rapid.IntRange(0, 3).Draw(t, "semicolon") == 0 {
				d, columns = five, 5
			}
			n := columns
			if rapid.IntRange(0, 9).Draw(t, "other number") == 0 {
				n = rapid.IntRange(1, 7).Draw(t, "cells")
			}
			line := strings.Join(rapid.SliceOfN(cell, n, n).Draw(t, "line"), string(d.comma)) + rapid.SampledFrom([]string{"", "", "\r", "\n", "\r\n"}).Draw(t, "end")
			if strings.Trim(line, "\r\n") == "" {
				continue // an empty line, which callers pass over
			}
			checked++
			if d.Decode([]byte(line), make(expr.Record, 4)) == nil {
				accepted++
			}
			csvAgree(t, d, []byte(line), columns)
		}
	})
	if share := float64(accepted) / float64(checked); share < 0.2 || share > 0.8 {
		t.Errorf("%.0f%% of the records were valid: the generator no longer tries both sides", 100*share)
	}
}

func FuzzCSV(f *testing.F) {
	for _, s := range []string{"a,1,b", `"a ""b"", c",2.5,`, `"a,1,b`, `a"b,1,c`, `"a"b,1,c`, ",,", "a,1", "a,1,b,c", " 1,+.5e3 ,\xff"} {
		f.Add([]byte(s))
	}
	d := newCSV(f, csvFields, CSVOptions{}, "c0,c1,c2")
	f.Fuzz(func(t *testing.T, line []byte) {
		// Only one-line records can be compared. A bare \r before the end is one
		// that the oracle drops at the end of the data.
		if bytes.IndexByte(line, '\n') >= 0 || len(bytes.TrimRight(line, "\r")) == 0 {
			return
		}
		csvAgree(t, d, line, 3)
	})
}

func TestCSVFaults(t *testing.T) {
	for _, tt := range []struct {
		line   string
		kind   FaultKind
		offset int
	}{
		{"a,1", Cells, 3},
		{"a,1,b,c", Cells, 5},
		{"", Cells, 0},
		{`a,"1,b`, Syntax, 6},
		{"a,\"1\n2\",b", Syntax, 4},
		{"a,1\n2,b", Syntax, 3},
		{`a"b,1,c`, Syntax, 1},
		{`"a"b,1,c`, Syntax, 3},
		{"a,1,\xffb", UTF8, 4},
	} {
		d := newCSV(t, csvFields, CSVOptions{}, "c0,c1,c2")
		var f *Fault
		if err := d.Decode([]byte(tt.line), make(expr.Record, 4)); !errors.As(err, &f) || f.Kind != tt.kind || f.Offset != tt.offset {
			t.Errorf("%q: got %v, want %v at %d", tt.line, err, tt.kind, tt.offset)
		}
	}
	d, err := NewCSV(csvFields, CSVOptions{})
	var f *Fault
	if err != nil || !errors.As(d.Decode([]byte("a,1,b"), make(expr.Record, 4)), &f) || f.Kind != NoHeader {
		t.Errorf("without header: got %v, %v", f, err)
	}
}

func TestCSVHeader(t *testing.T) {
	d := newCSV(t, csvFields, CSVOptions{}, "\ufeffc2,\"x\",c0,x\r\n")
	if want := []string{"c1", "gone"}; !slices.Equal(d.Missing(), want) {
		t.Errorf("missing: got %v, want %v", d.Missing(), want)
	}
	rec := make(expr.Record, 4)
	if err := d.Decode([]byte("1,2,3,4"), rec); err != nil || string(rec[0].Text) != "3" || string(rec[2].Text) != "1" || rec[1].Kind != expr.Absent {
		t.Errorf("got %v, %v", rec, err)
	}
	kept := d.Header([]byte(`x,"c0`))
	var fault *Fault
	if !errors.As(kept, &fault) {
		t.Fatalf("got %v", kept)
	}
	said := *fault
	if d.Decode([]byte("1,2"), rec) == nil || *fault != said {
		t.Errorf("the header's fault became %v, was %v", fault, &said)
	}
	for _, bad := range []string{"c0,c1,c0", `c0,"c1`, "c0,\xff"} {
		if err := d.Header([]byte(bad)); err == nil {
			t.Errorf("%q was accepted", bad)
		}
	}
	if err := d.Decode([]byte("1,2,3,4"), rec); err != nil { // the old header still stands
		t.Error(err)
	}
	if err := d.Header([]byte("gone")); err != nil || len(d.Missing()) != 3 {
		t.Errorf("got %v, missing %v", err, d.Missing())
	}
	header := []byte("c0,c1")
	if err := d.Header(header); err != nil {
		t.Error(err)
	}
	copy(header, "c1,c0") // the decoder must not have kept the caller's bytes
	if err := d.Header(header); err != nil || d.Decode([]byte("1,2"), rec) != nil || string(rec[0].Text) != "2" {
		t.Errorf("after a second header: got %s, %v", show(rec[0]), err)
	}
	if n := testing.AllocsPerRun(10, func() { _ = d.Header(header) }); n != 0 {
		t.Errorf("the same header again: %v allocations", n)
	}
	for _, comma := range []byte{'"', '\n', '\r', 0xc3} {
		if _, err := NewCSV(csvFields, CSVOptions{Comma: comma}); err == nil {
			t.Errorf("comma %q was accepted", comma)
		}
	}
}
