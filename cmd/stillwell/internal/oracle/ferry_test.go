package oracle_test

import (
	"bytes"
	"compress/gzip"
	"context"
	"encoding/csv"
	"encoding/json"
	"flag"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/klauspost/compress/zstd"

	. "stillwell/cmd/stillwell/internal/oracle"
	"stillwell/cmd/stillwell/internal/station"
	"stillwell/config"
)

var rewrite = flag.Bool("rewrite", false, "write testdata/ferry anew: lines from their script, expected numbers by the oracle")

const ferryFolder = "../../../../testdata/ferry"

// ferryFile says in the oracle's own terms what testdata/ferry/study.yaml says.
func ferryFile() *File {
	offer := And(Is("type", "assign"), Is("trial", "cabin-offer"))
	notice := And(Is("type", "assign"), Is("trial", "deck-notice"))
	return &File{
		Stream:   Stream{Time: "ts", ID: "id", Lateness: 20 * time.Minute},
		Every:    time.Hour,
		Level:    0.95,
		Segments: 4,
		Studies: []Study{
			{
				Name: "cabin-offer", Key: "passenger", Entry: &offer, Arm: "arm", Baseline: "plain", Arms: []string{"plain", "photo", "film"},
				FollowUp: 8 * time.Hour, Again: 30 * time.Hour, From: day.Add(24 * time.Hour), Until: day.Add(76 * time.Hour), By: []string{"platform"},
				Tallies: []Tally{
					{Name: "visits", Kind: Count, When: &visit},
					{Name: "fare", Kind: Sum, Value: Field("amount"), When: &ticket},
					{Name: "bought", Kind: Any, When: &ticket},
					{Name: "slowest", Kind: Max, Value: Field("ms"), When: &pay},
					{Name: "past", Kind: Sum, Value: Field("amount"), When: &ticket, Before: 24 * time.Hour},
					{Name: "past_trips", Kind: Count, When: &ticket, Before: 24 * time.Hour, Grain: 6 * time.Hour},
				},
				Estimates: []Estimate{
					{Name: "capped_fare", Of: Mean(Capped(T("fare"), 250))},
					{Name: "slowest_pay", Of: Mean(T("slowest"))},
					{Name: "fare", Of: Mean(T("fare")), Contrast: "difference"},
					{Name: "fare_lift", Of: Mean(T("fare")), Contrast: "relative"},
					{Name: "fare_per_visit", Of: Ratio(T("fare"), T("visits")), Contrast: "difference"},
					{Name: "fare_adjusted", Of: Mean(T("fare")), Contrast: "difference", Adjust: []Covariate{{Tally: "past"}, {Field: "age"}}},
					{Name: "lift_adjusted", Of: Mean(T("fare")), Contrast: "relative", Adjust: []Covariate{{Tally: "past_trips"}}},
					{Name: "pay_gap", Of: Mean(T("slowest")), Contrast: "difference", Present: true},
				},
			},
			{
				Name: "deck-notice", Key: "passenger", Entry: &notice, Arm: "arm", Baseline: "off", Arms: []string{"off", "on"},
				Leave: true, FollowUp: 5 * time.Hour, Never: true, By: []string{"platform", "country"},
				Tallies: []Tally{
					{Name: "fare", Kind: Sum, Value: Field("amount"), When: &ticket},
					{Name: "cheapest", Kind: Min, Value: Field("amount"), When: &ticket},
					{Name: "opening", Kind: First, Value: Field("amount"), When: &ticket},
					{Name: "latest", Kind: Last, Value: Field("amount"), When: &ticket},
					{Name: "bought", Kind: Any, When: &ticket},
				},
				Estimates: []Estimate{
					{Name: "bought", Of: Mean(T("bought")), Contrast: "difference"},
					{Name: "cheapest", Of: Mean(Or0(T("cheapest"))), Contrast: "difference"},
					{Name: "opening", Of: Mean(T("opening"))},
					{Name: "rise", Of: Less(T("latest"), 1, T("opening"))},
					{Name: "fare", Of: Mean(T("fare")), Contrast: "relative"},
				},
			},
			{
				Name: "quarter-hours", Bucket: 15 * time.Minute,
				Tallies:   []Tally{{Name: "pays", Kind: Count, When: &pay}, {Name: "ms", Kind: Sum, Value: Field("ms"), When: &pay}},
				Estimates: []Estimate{{Name: "per_pay", Of: Ratio(T("ms"), T("pays"))}, {Name: "pays", Of: Mean(T("pays"))}},
			},
			{
				Name: "payments", Events: true, Entry: &pay,
				Tallies:   []Tally{{Name: "ms", Kind: Max, Value: Field("ms")}},
				Estimates: []Estimate{{Name: "known", Of: Mean(T("ms"))}, {Name: "slow", Of: Mean(Exceeds(Or0(T("ms")), 800))}},
			},
			{
				Name: "customers", Key: "passenger",
				Tallies:   []Tally{{Name: "fare", Kind: Sum, Value: Field("amount"), When: &ticket}, {Name: "visits", Kind: Count, When: &visit}},
				Estimates: []Estimate{{Name: "fare", Of: Mean(T("fare"))}, {Name: "per_visit", Of: Ratio(T("fare"), T("visits"))}},
			},
		},
	}
}

// An expectation is a line of expected.jsonl.
type expectation struct {
	Study       string      `json:"study"`
	Estimate    string      `json:"estimate"`
	Arm         string      `json:"arm,omitempty"`
	Segment     string      `json:"segment"`
	Value       *float64    `json:"value"`
	StdError    *float64    `json:"std_error,omitempty"` // not worked out for time buckets
	Units       any         `json:"units"`
	Interval    *[2]float64 `json:"interval,omitempty"` // where it is value +- t std_error
	Provisional *float64    `json:"provisional"`
	OfUnits     any         `json:"provisional_units"`
}

func expectations(r Result) []byte {
	defined := func(x float64) *float64 {
		if math.IsNaN(x) {
			return nil
		}
		return &x
	}
	var b bytes.Buffer
	for _, w := range r.Readings {
		e := expectation{w.Study, w.Estimate, w.Arm, w.Segment, defined(w.Value), defined(w.StdError), w.Units, w.Interval,
			defined(w.Provisional.Value), w.Provisional.Units}
		line, err := json.Marshal(e)
		if err != nil {
			panic(err)
		}
		b.Write(append(line, '\n'))
	}
	return b.Bytes()
}

func ferryParts(t *testing.T) [][]byte {
	var parts [][]byte
	for _, name := range []string{"site.jsonl", "harbour.jsonl"} {
		text, err := os.ReadFile(filepath.Join(ferryFolder, name))
		if err != nil {
			t.Fatal(err)
		}
		parts = append(parts, text)
	}
	return parts
}

// TestFerryExpected: the numbers in the folder are the oracle's, to the last digit.
func TestFerryExpected(t *testing.T) {
	if *rewrite {
		days := ferryDays()
		write(t, filepath.Join(ferryFolder, "site.jsonl"), []byte(days[0]))
		write(t, filepath.Join(ferryFolder, "harbour.jsonl"), []byte(days[1]))
	}
	end := Evaluate(ferryFile(), ferryParts(t))
	counted, err := json.MarshalIndent(map[string]any{"stream": end.Stream, "studies": end.Studies}, "", " ")
	if err != nil {
		t.Fatal(err)
	}
	for name, want := range map[string][]byte{"expected.jsonl": expectations(end), "counters.json": append(bytes.ToLower(counted), '\n')} {
		path := filepath.Join(ferryFolder, name)
		if *rewrite {
			write(t, path, want)
		}
		if got, err := os.ReadFile(path); err != nil || !bytes.Equal(got, want) {
			t.Errorf("%s is not what the oracle gives (%v)", path, err)
		}
	}
}

func write(t *testing.T, path string, text []byte) {
	t.Helper()
	if err := os.WriteFile(path, text, 0o644); err != nil {
		t.Fatal(err)
	}
}

// TestFerry: the program gives the expected numbers, whatever form the lines have.
func TestFerry(t *testing.T) {
	parts := ferryParts(t)
	want := Arrive(ferryFile(), parts)
	var first []byte
	for _, form := range []struct {
		ext    string
		encode func(*testing.T, []byte) []byte
	}{
		{".jsonl", func(_ *testing.T, b []byte) []byte { return b }},
		{".jsonl.gz", gzipped},
		{".jsonl.zst", zstandard},
		{".csv", asCSV},
		{".csv.gz", func(t *testing.T, b []byte) []byte { return gzipped(t, asCSV(t, b)) }},
	} {
		t.Run(form.ext, func(t *testing.T) {
			dir := t.TempDir()
			var from []string
			for i, p := range parts {
				path := filepath.Join(dir, fmt.Sprint("part-", i, form.ext))
				write(t, path, form.encode(t, p))
				from = append(from, path)
			}
			yaml, err := os.ReadFile(filepath.Join(ferryFolder, "study.yaml"))
			if err != nil {
				t.Fatal(err)
			}
			if strings.Contains(form.ext, "csv") {
				yaml = bytes.Replace(yaml, []byte("format: json"), []byte("format: csv"), 1)
			}
			file, err := config.Parse(filepath.Join(dir, "study.yaml"), yaml)
			if err != nil {
				t.Fatal(err)
			}
			out := filepath.Join(dir, "out")
			done, err := station.Replay(context.Background(), file, station.ReplayOptions{From: from, Out: out, Workers: 2})
			if err != nil {
				t.Fatal(err)
			}
			rec, err := readRecord(filepath.Join(out, "readings.jsonl"))
			if err != nil {
				t.Fatal(err)
			}
			text, err := os.ReadFile(filepath.Join(out, "readings.jsonl"))
			if err != nil {
				t.Fatal(err)
			}
			if first == nil {
				first = text
				for _, d := range differences(want, time.Hour, done.Counters, rec) {
					t.Error(d)
				}
			}
			if !bytes.Equal(text, first) {
				t.Errorf("%d bytes of readings, not the %d that the plain lines gave, or other ones", len(text), len(first))
			}
		})
	}
}

func gzipped(t *testing.T, b []byte) []byte {
	var out bytes.Buffer
	return packed(t, b, gzip.NewWriter(&out), &out)
}

func zstandard(t *testing.T, b []byte) []byte {
	var out bytes.Buffer
	z, err := zstd.NewWriter(&out)
	if err != nil {
		t.Fatal(err)
	}
	return packed(t, b, z, &out)
}

func packed(t *testing.T, b []byte, z io.WriteCloser, out *bytes.Buffer) []byte {
	if _, err := z.Write(b); err != nil {
		t.Fatal(err)
	}
	if err := z.Close(); err != nil {
		t.Fatal(err)
	}
	return out.Bytes()
}

// asCSV writes the events as a table; what is no JSON object becomes a row without a time.
func asCSV(t *testing.T, lines []byte) []byte {
	header := []string{"id", "ts", "type", "passenger", "trial", "arm", "platform", "country", "amount", "ms", "age"}
	var out bytes.Buffer
	w := csv.NewWriter(&out)
	if err := w.Write(header); err != nil {
		t.Fatal(err)
	}
	for line := range bytes.Lines(lines) {
		if len(bytes.TrimSpace(line)) == 0 {
			continue
		}
		var fields map[string]any
		d := json.NewDecoder(bytes.NewReader(line))
		d.UseNumber()
		cells := make([]string, len(header))
		if err := d.Decode(&fields); err != nil || bytes.Contains(line, []byte("\xc3\"")) {
			cells[0] = "broken"
		} else {
			for i, name := range header {
				if v := fields[name]; v != nil {
					cells[i] = fmt.Sprint(v)
				}
			}
		}
		if err := w.Write(cells); err != nil {
			t.Fatal(err)
		}
	}
	w.Flush()
	return out.Bytes()
}
