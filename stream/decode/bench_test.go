package decode

import (
	"bytes"
	"fmt"
	"math/rand/v2"
	"testing"

	"stillwell/online/expr"
)

var ferryFields = []Field{
	{Path: "id"}, {Path: "ts"}, {Path: "type"}, {Path: "passenger"}, {Path: "platform"},
	{Path: "arm"}, {Path: "amount", Numeric: true}, {Path: "ms", Numeric: true},
}

// ferryJSON makes about a megabyte of a ticket site's events: several types, each with keys of its own.
func ferryJSON(size int) []byte {
	rng := rand.New(rand.NewPCG(7, 41))
	var b bytes.Buffer
	for i := 0; b.Len() < size; i++ {
		fmt.Fprintf(&b, `{"id": "h%04d", "ts": "2026-03-%02dT%02d:%02d:%02d.%03dZ", `,
			i, 1+i%28, rng.IntN(24), rng.IntN(60), rng.IntN(60), rng.IntN(1000))
		passenger, platform := rng.IntN(900), []string{"web", "app", "kiosk"}[rng.IntN(3)]
		switch rng.IntN(4) {
		case 0:
			fmt.Fprintf(&b, `"type": "assign", "trial": "seat-map", "passenger": "p-%03d", "platform": "%s", "arm": "%s"`,
				passenger, platform, []string{"current", "wide"}[rng.IntN(2)])
		case 1:
			fmt.Fprintf(&b, `"type": "ticket", "passenger": "p-%03d", "platform": "%s", "amount": %.2f`, passenger, platform, rng.Float64()*300)
		default:
			fmt.Fprintf(&b, `"type": "visit", "passenger": "p-%03d", "platform": "%s", "amount": %.2f, "ms": %.1f`,
				passenger, platform, rng.Float64()*300, rng.Float64()*2000)
		}
		b.WriteString("}\n")
	}
	return b.Bytes()
}

func ferryCSV(size int) []byte {
	rng := rand.New(rand.NewPCG(7, 42))
	var b bytes.Buffer
	b.WriteString("id,ts,type,passenger,platform,arm,amount,ms,note\n")
	for i := 0; b.Len() < size; i++ {
		note := []string{"", "late", `"deck, upper"`, `"said ""hello"""`}[rng.IntN(4)]
		fmt.Fprintf(&b, "h%04d,2026-03-%02dT%02d:%02d:%02d.%03dZ,visit,p-%03d,web,,%.2f,%.1f,%s\n",
			i, 1+i%28, rng.IntN(24), rng.IntN(60), rng.IntN(60), rng.IntN(1000), rng.IntN(900), rng.Float64()*300, rng.Float64()*2000, note)
	}
	return b.Bytes()
}

func benchmark(b *testing.B, d Decoder, block []byte) {
	rec := make(expr.Record, len(ferryFields))
	b.SetBytes(int64(len(block)))
	b.ReportAllocs()
	for b.Loop() {
		lines := SplitLines(block, true)
		for line, _, ok := lines.Next(); ok; line, _, ok = lines.Next() {
			if err := d.Decode(line, rec); err != nil {
				b.Fatal(err)
			}
		}
	}
}

func BenchmarkJSON(b *testing.B) {
	benchmark(b, NewJSON(ferryFields), ferryJSON(1<<20))
}

// One type of event, so that every line has the same keys.
func BenchmarkJSONUniform(b *testing.B) {
	block := bytes.Repeat([]byte(`{"id": "h0058", "ts": "2026-03-03T06:21:38.098Z", "type": "visit", "passenger": "p-033", "platform": "web", "amount": 208.41, "ms": 910.0}`+"\n"), 7000)
	benchmark(b, NewJSON(ferryFields), block)
}

func BenchmarkCSV(b *testing.B) {
	block := ferryCSV(1 << 20)
	header, rest, _ := bytes.Cut(block, []byte("\n"))
	d, err := NewCSV(ferryFields, CSVOptions{})
	if err != nil {
		b.Fatal(err)
	}
	if err := d.Header(header); err != nil {
		b.Fatal(err)
	}
	benchmark(b, d, rest)
}

func BenchmarkParseTime(b *testing.B) {
	for _, bb := range []struct {
		text string
		spec TimeSpec
	}{{"2026-03-03T06:21:38.098Z", RFC3339}, {"2026-03-03T07:21:38.098123+01:00", RFC3339}, {"1772518898098", UnixMillis}, {"1772518898.098", UnixSeconds}} {
		b.Run(bb.text, func(b *testing.B) {
			v := expr.Value{Kind: expr.Text, Text: []byte(bb.text)}
			for b.Loop() {
				if _, err := ParseTime(v, bb.spec); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
