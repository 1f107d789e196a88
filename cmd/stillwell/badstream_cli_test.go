package main

import (
	"bytes"
	"compress/gzip"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
)

// site is a folder with the site's events and its study file.
func site(t *testing.T, events string) string {
	t.Helper()
	dir := folder(t)
	put(t, filepath.Join(dir, "events.jsonl"), events)
	put(t, filepath.Join(dir, "study.yaml"), siteStudy("file: {path: events.jsonl}", "sinks: {file: {path: readings.jsonl}}\n"))
	return dir
}

// stamped is where a line's time stands.
func stamped(t *testing.T, line string) (from, to int, at time.Time) {
	t.Helper()
	from = strings.Index(line, `"ts":"`) + len(`"ts":"`)
	to = from + len("2026-03-02T10:00:00.000Z")
	at, err := time.Parse(time.RFC3339Nano, line[from:to])
	if err != nil {
		t.Fatal(err)
	}
	return from, to, at
}

// TestOffsets: one moment, written in whatever way, is one moment.
func TestOffsets(t *testing.T) {
	lines := tickets(2, 2000)
	dir := site(t, joined(lines))
	want := replay(t, dir, "study.yaml", "events.jsonl")
	rng := rand.New(rand.NewPCG(2, 0))
	for i, line := range lines {
		from, to, at := stamped(t, line)
		zone := time.FixedZone("", (rng.IntN(2*23*60)-23*60)*60)
		ts := at.In(zone).Format([]string{"2006-01-02T15:04:05.000-07:00", "2006-01-02t15:04:05.000000000-07:00", "2006-01-02 15:04:05.000000000000-07:00"}[rng.IntN(3)])
		ts = strings.Replace(ts, ".000000000000", at.Format(".000")+"000000000", 1) // more digits than time.Format knows
		lines[i] = line[:from] + ts + line[to:]
	}
	put(t, filepath.Join(dir, "offsets.jsonl"), joined(lines))
	got := replay(t, dir, "study.yaml", "offsets.jsonl")
	same(t, got, want)
	if got.counters.String() != want.counters.String() {
		t.Errorf("counters\n got %s\nwant %s", got.counters, want.counters)
	}
}

// TestTypeChanges: a field that changes its type in the middle of a stream spoils the events
// after it, and none before.
func TestTypeChanges(t *testing.T) {
	lines := tickets(3, 3000)
	dir := folder(t)
	var clean, changed []string
	spoiled := int64(0)
	for i, line := range lines {
		if at := strings.Index(line, `"amount":`); at >= 0 && i > len(lines)/2 {
			at += len(`"amount":`)
			changed = append(changed, line[:at]+`"`+strings.TrimSuffix(line[at:], "}")+`"}`)
			spoiled++
			continue
		}
		clean, changed = append(clean, line), append(changed, line)
	}
	put(t, filepath.Join(dir, "study.yaml"), siteStudy("file: {path: events.jsonl}", ""))
	put(t, filepath.Join(dir, "clean.jsonl"), joined(clean))
	put(t, filepath.Join(dir, "changed.jsonl"), joined(changed))
	want, got := replay(t, dir, "study.yaml", "clean.jsonl"), replay(t, dir, "study.yaml", "changed.jsonl")
	same(t, got, want)
	sum := want.counters.add(map[string]int64{"read": spoiled, "malformed": spoiled}, nil)
	if spoiled < 100 || got.counters.String() != sum.String() {
		t.Errorf("%d spoiled: counters\n got %s\nwant %s", spoiled, got.counters, sum)
	}
}

// TestExtremes: the largest and smallest numbers that there are leave readings that can be read.
func TestExtremes(t *testing.T) {
	lines := tickets(4, 2000)
	values := []string{"1.7976931348623157e308", "-1.7976931348623157e308", "5e-324", "-5e-324", "1e-999", "-0", "0", "1e308", "123456789012345678901234567890"}
	n := 0
	for i, line := range lines {
		if at := strings.Index(line, `"amount":`); at >= 0 {
			lines[i] = line[:at] + `"amount":` + values[n%len(values)] + "}"
			n++
		}
	}
	dir := site(t, joined(lines))
	got := replay(t, dir, "study.yaml", "events.jsonl")
	if got.counters.Stream["malformed"] != 0 || n < 300 {
		t.Errorf("%d extreme values: %s", n, got.counters)
	}
	for i, line := range strings.Split(strings.TrimSuffix(got.readings, "\n"), "\n") {
		var reading struct {
			Kind  string
			Value *float64
			Why   map[string]string
		}
		if err := json.Unmarshal([]byte(line), &reading); err != nil {
			t.Fatalf("line %d: %v: %s", i+1, err, line)
		}
		if reading.Kind == "reading" && reading.Value == nil && reading.Why["value"] == "" {
			t.Errorf("line %d has no value and no reason: %s", i+1, line)
		}
	}
}

// TestFirstLineMalformed: a stream that begins with a malformed event is read like any other.
func TestFirstLineMalformed(t *testing.T) {
	good := joined(tickets(5, 2000))
	dir := site(t, "hello\n{}\n"+good)
	put(t, filepath.Join(dir, "good.jsonl"), good)
	want, got := replay(t, dir, "study.yaml", "good.jsonl"), replay(t, dir, "study.yaml", "events.jsonl")
	same(t, got, want)
	if sum := want.counters.add(map[string]int64{"read": 2, "malformed": 2}, nil); got.counters.String() != sum.String() {
		t.Errorf("counters\n got %s\nwant %s", got.counters, sum)
	}
}

// TestFutureEvent: a time that is far ahead, and within what the stream allows, makes the events
// after it late; that is quick, however much time is passed over, and it is told.
func TestFutureEvent(t *testing.T) {
	lines := tickets(6, 2000)
	lines[1000] = `{"ts":"2099-12-31T23:59:59Z","type":"note"}`
	dir := site(t, joined(lines))
	start := time.Now()
	got := replay(t, dir, "study.yaml", "events.jsonl")
	if got.counters.Stream["late"] < 900 || got.counters.Stream["malformed"] != 0 {
		t.Errorf("counters %s, want about a thousand late", got.counters)
	}
	if took := time.Since(start); took > patience/2 {
		t.Errorf("73 years took %s", took)
	}
	mentions(t, got.stderr, "999 of 2000 events", "late", "Line 1001 of events.jsonl", "26968d", "2099-12-31", "stream.between")
}

// TestOddFiles: files with nothing in them, or with odd ends, in replay and run.
func TestOddFiles(t *testing.T) {
	good := joined(tickets(7, 1000))
	zipped := func(text string) string {
		var b bytes.Buffer
		w := gzip.NewWriter(&b)
		w.Write([]byte(text))
		w.Close()
		return b.String()
	}
	whole := map[string]int64{"read": 1000}
	for _, tt := range []struct {
		name, events string
		want         map[string]int64 // of the stream's counters
	}{
		{"empty", "", map[string]int64{"read": 0}},
		{"one newline", "\n", map[string]int64{"read": 0}},
		{"blank lines", strings.Repeat(" \t\r\n", 100_000), map[string]int64{"read": 0}},
		{"an endless blank line", strings.Repeat(" ", 3<<20), map[string]int64{"read": 0}},
		{"nothing but faults", strings.Repeat("x\n", 5000), map[string]int64{"read": 5000, "malformed": 5000}},
		{"one fault without newline", "x", map[string]int64{"read": 1, "malformed": 1}},
		{"without final newline", strings.TrimSuffix(good, "\n"), whole},
		{"byte order mark", "\ufeff" + good, whole},
		{"other line ends", strings.ReplaceAll(good, "\n", "\r\n"), whole},
		{"gzip under another name", zipped(good), whole},
		{"gzip of nothing", zipped(""), map[string]int64{"read": 0}},
	} {
		t.Run(tt.name, func(t *testing.T) {
			dir := site(t, tt.events)
			got := replay(t, dir, "study.yaml", "events.jsonl")
			for k, n := range tt.want {
				if got.counters.Stream[k] != n {
					t.Errorf("%s: %d, want %d; %s", k, got.counters.Stream[k], n, got.counters)
				}
			}
			if tt.want["read"] == 1000 {
				put(t, filepath.Join(dir, "plain.jsonl"), good)
				same(t, got, replay(t, dir, "study.yaml", "plain.jsonl"))
			} else if got.readings != "" || got.alarms != "" {
				t.Errorf("readings of nothing: %.300q %.300q", got.readings, got.alarms)
			}
			for range 2 {
				invoke(t, dir, exitDone, "run", "study.yaml")
				same(t, replayed{readings: text(t, filepath.Join(dir, "readings.jsonl")), alarms: text(t, filepath.Join(dir, "alarms.jsonl"))}, got)
			}
		})
	}
}

// csvStudy is a study on tickets in CSV.
const csvStudy = `stream:
  file: {path: events.csv}
  format: csv
  time: ts
  id: id
  lateness: 1h
studies:
  - name: fares
    units: {key: passenger, follow_up: 24h}
    tallies:
      fare:  {sum: amount, when: 'type == "ticket"'}
      trips: {count: 'type == "ticket"'}
    estimates:
      fare_per_passenger: {of: mean(fare) / mean(trips)}
readings: {every: 1h}
`

// TestCSV: what a CSV file can do wrong.
func TestCSV(t *testing.T) {
	dir := folder(t)
	put(t, filepath.Join(dir, "study.yaml"), csvStudy)
	const header = "id,ts,type,passenger,amount,more"
	good, mixed := []string{header}, []string{header}
	bad := map[string]int64{}
	rng := rand.New(rand.NewPCG(8, 0))
	for i := range 1000 {
		ts := time.Date(2026, 3, 2, 0, i, 0, 0, time.UTC).Format(time.RFC3339)
		line := fmt.Sprintf("%d,%s,ticket,p-%d,%d.50,", i, ts, i%200, rng.IntN(90))
		good, mixed = append(good, line), append(mixed, line)
		for _, wrong := range []struct{ line, verdict, outcome string }{
			{"too,few,cells", "malformed", ""},
			{"x," + ts + ",ticket,p-1,12,,", "malformed", ""},
			{"x," + ts + ",ticket,p-1,12", "malformed", ""},
			{`x,` + ts + `,ticket,"p-1,12,`, "malformed", ""},
			{`x,` + ts + `,tic"ket,p-1,12,`, "malformed", ""},
			{`x,` + ts + `,"ticket"s,p-1,12,`, "malformed", ""},
			{"x," + ts + ",ticket,p-1,NaN,", "malformed", ""},
			{"x," + ts + ",ticket,p-1,inf,", "malformed", ""},
			{"x," + ts + ",ticket,p-1,1e999,", "malformed", ""},
			{"x," + ts + ",ticket,p-1,twelve,", "malformed", ""},
			{"x," + ts + `,ticket,p-1,"1,5",`, "malformed", ""},
			{"x," + ts + ",ticket,p-\xff,12,", "malformed", ""},
			{"x,,ticket,p-1,12,", "malformed", ""},
			{"x,soon,ticket,p-1,12,", "malformed", ""},
			{"x,1999-01-01T00:00:00Z,ticket,p-1,12,", "malformed", ""},
			{",,,,,", "malformed", ""},
			{header, "malformed", ""},
			{"x," + ts + ",ticket,p-1,12," + strings.Repeat("x", 1<<20), "malformed", ""},
			{"," + ts + ",ticket,,12,", "delivered", "filtered"},
			{fmt.Sprintf(`,"%s","""","odd, %d",,`, ts, i), "delivered", "applied"}, // a unit that says nothing
		} {
			if rng.IntN(200) == 0 {
				mixed = append(mixed, wrong.line)
				bad["read"]++
				bad[wrong.verdict]++
				bad[wrong.outcome]++
			}
		}
	}
	put(t, filepath.Join(dir, "good.csv"), joined(good))
	put(t, filepath.Join(dir, "mixed.csv"), joined(mixed))
	if bad["malformed"] < 50 || bad["applied"] == 0 || bad["filtered"] == 0 {
		t.Fatalf("too tame: %v", bad)
	}
	want, got := replay(t, dir, "study.yaml", "good.csv"), replay(t, dir, "study.yaml", "mixed.csv")
	sum := want.counters.add(map[string]int64{"read": bad["read"], "malformed": bad["malformed"], "delivered": bad["delivered"]},
		map[string]map[string]int64{"fares": {"applied": bad["applied"], "filtered": bad["filtered"]}})
	if got.counters.String() != sum.String() {
		t.Errorf("counters\n got %s\nwant %s", got.counters, sum)
	}
	if want.counters.Stream["malformed"] != 0 || want.counters.Stream["delivered"] != 1000 {
		t.Errorf("the good file: %s", want.counters)
	}

	for name, h := range map[string]string{"no header": "", "no time column": "id,when,type,passenger,amount,more\n", "a column twice": "id,ts,ts,passenger,amount,more\n", "broken": "id,\xff,type,passenger,amount,more\n"} {
		put(t, filepath.Join(dir, "headless.csv"), h+joined(good[1:]))
		r := replay(t, dir, "study.yaml", "headless.csv")
		if r.counters.Stream["delivered"] != 0 || r.counters.Stream["malformed"] < 999 {
			t.Errorf("%s: %s", name, r.counters)
		}
	}
	put(t, filepath.Join(dir, "header.csv"), header+"\n")
	if r := replay(t, dir, "study.yaml", "header.csv"); r.counters.Stream["read"] != 0 {
		t.Errorf("a header alone: %s", r.counters)
	}
}

// TestUnreadable: what cannot be read is an error that names it and says what to do.
func TestUnreadable(t *testing.T) {
	dir := site(t, joined(tickets(8, 10)))
	put(t, filepath.Join(dir, "broken.gz"), "\x1f\x8b\x08\x00\x00\x00\x00\x00\x00\x03 and no more")
	if err := os.Mkdir(filepath.Join(dir, "folder"), 0o755); err != nil {
		t.Fatal(err)
	}
	for _, tt := range []struct {
		from  string
		parts []string
	}{
		{"nowhere.jsonl", []string{"nowhere.jsonl", "no such file", "check the path"}},
		{"no/where.jsonl", []string{"no/where.jsonl", "no such file", "check the path"}},
		{"folder", []string{"folder is a folder", "name its files"}},
		{"nothing-*.jsonl", []string{"nothing-*.jsonl", "no file matches"}},
		{"events.jsonl/x", []string{"events.jsonl/x", "not a directory"}},
		{"broken.gz", []string{"broken.gz", "damaged or cut short", "again"}},
	} {
		_, stderr := invoke(t, dir, exitFailed, "replay", "study.yaml", "--from", tt.from, "--out", "out")
		mentions(t, stderr, tt.parts...)
	}
	for _, path := range []string{"nowhere.jsonl", "folder"} {
		put(t, filepath.Join(dir, "bad.yaml"), siteStudy("file: {path: "+path+"}", ""))
		_, stderr := invoke(t, dir, exitFailed, "run", "bad.yaml")
		mentions(t, stderr, path)
	}
}
