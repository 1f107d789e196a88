package oracle_test

import (
	"fmt"
	"os"
	"slices"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	. "stillwell/cmd/stillwell/internal/oracle"
)

// epoch is where random streams begin: an hour before a day of the ferry company's begins.
var epoch = time.Date(2026, 2, 28, 23, 0, 0, 0, time.UTC)

const grid = 5 * time.Minute

func one[T any](t *rapid.T, label string, of ...T) T { return rapid.SampledFrom(of).Draw(t, label) }

// chance is true once in n; it shrinks to false.
func chance(t *rapid.T, label string, n int) bool {
	return rapid.IntRange(0, n-1).Draw(t, label) == n-1
}

// A pool is a field's raw JSON: usual texts, and odd ones ("" leaves the field away).
type pool struct {
	name       string
	usual, odd []string
}

var pools = []pool{
	{"type", []string{`"assign"`, `"ticket"`, `"visit"`, `"pay"`}, []string{"", "null", "5", `"\u0074icket"`, `"Ticket"`, "true", `["ticket"]`}},
	{"passenger", []string{`"p1"`, `"p2"`, `"p3"`, `"p4"`, `"p5"`, `"p6"`}, []string{"", "null", `"p\u0031"`, "12", `"12"`, "12.0", `"12.0"`, `""`, "true", `"true"`, `"p\u00e4"`, `"pä"`, `"NaN"`}},
	{"trial", []string{`"seat-map"`}, []string{"", "null", `"other"`, "1"}},
	{"arm", []string{`"current"`, `"wide"`}, []string{"", "null", `"tall"`, `"w\u0069de"`, `"Wide"`, "1"}},
	{"platform", []string{`"web"`, `"app"`}, []string{"", "null", `"kiosk"`, "7", `"7"`, "7.0", "false"}},
	{"amount", []string{"10", "12.5", "0", "-3", "1e2", "0.1"}, []string{"", "null", `"12"`, `"NaN"`, "1e999", "{}", "-0", "1234.25"}},
	{"ms", []string{"700", "900", "801", "800", "12.5"}, []string{"", "null", `"900"`, `"Infinity"`, "[]", "-1e999"}},
	{"vip", []string{"true", "false"}, []string{"", "null", `"true"`, "1"}},
}

var broken = []string{
	`{"id":"x","ts":"2026-03-01T01:00:00Z"`, `nonsense`, `[]`, `17`, `null`, `{}`, `{"ts":null,"type":"visit"}`,
	`{"ts":"tomorrow","type":"visit","passenger":"p1"}`, `{"ts":"1999-12-31T23:59:59Z","type":"visit"}`,
	`{"ts":"2101-01-01T00:00:00Z","type":"visit"}`, `{"ts":1772326800,"passenger":"p1"}`, `{"ts":"2026-03-01T01:00:00Z"} {}`,
	"{\"ts\":\"2026-03-01T01:00:00Z\",\"type\":\"\xff\"}", `{"ts":"2026-03-01T01:00:00Z","amount":NaN}`, `{"ts":"2026-03-01 01:00:00"}`,
}

// A draft is an event before it is written: when it happened, when it arrives, and where.
type draft struct {
	at, arrives time.Duration // since epoch
	part        int
	text        string
	copies      []draft
}

// A trial is a study file with a stream for it.
type trial struct {
	file  *File
	parts [][]byte
}

var trials = rapid.Custom(func(t *rapid.T) trial {
	f := file(t)
	parts := one(t, "partitions", 1, 1, 1, 2, 3)
	return trial{f, lines(t, f, parts)}
})

// lines draws the partitions' texts.
func lines(t *rapid.T, f *File, parts int) [][]byte {
	anchors := []time.Duration{0} // some entries happen at these times
	for range rapid.IntRange(0, 4).Draw(t, "anchors") {
		anchors = append(anchors, time.Duration(rapid.IntRange(0, 48).Draw(t, "anchor"))*grid)
	}
	spans := []time.Duration{0} // and what matters happens at these distances from them
	for _, s := range f.Studies {
		spans = append(spans, s.FollowUp, s.FollowUp+s.Again, -s.Bucket)
		for _, tl := range s.Tallies {
			spans = append(spans, -tl.Before)
		}
	}
	drafts := rapid.SliceOfN(rapid.Custom(func(t *rapid.T) draft { return event(t, f, parts, anchors, spans) }), 1, 60).Draw(t, "events")
	var all []draft
	for i, d := range drafts {
		// Letters in no order of time, so that the order of ids matters where times are equal.
		id := fmt.Sprintf(`"id":"%c%d",`, 'a'+(i*7)%26, i)
		for _, c := range append([]draft{d}, d.copies...) {
			if rest, ok := strings.CutPrefix(c.text, "{"); ok && f.Stream.ID != "" {
				c.text = "{" + id + rest
			}
			all = append(all, c)
		}
	}
	slices.SortStableFunc(all, func(a, b draft) int { return int(a.arrives - b.arrives) })
	out := make([][]byte, parts)
	for _, d := range all {
		out[d.part] = append(append(out[d.part], d.text...), '\n')
	}
	return out
}

// event draws one event.
func event(t *rapid.T, f *File, parts int, anchors, spans []time.Duration) (d draft) {
	if chance(t, "anchored", 2) {
		d.at = one(t, "of", anchors...) + one(t, "span", spans...) + one(t, "off", 0, 0, -1, 1, grid, -grid)
	} else {
		d.at = time.Duration(rapid.IntRange(0, 96).Draw(t, "time")) * grid
	}
	d.at = max(d.at, -12*time.Hour)
	odd := chance(t, "odd", 3)
	var fields []string
	apart := false
	for _, p := range pools {
		raw := one(t, p.name, p.usual...)
		if p.name == "arm" && hasPast(f) && open["a past event whose arm is undeclared"] {
			fields = append(fields, `"arm":`+raw)
			continue
		}
		if odd && chance(t, "odd "+p.name, 4) {
			raw = one(t, "odd text", p.odd...)
			apart = apart || p.name == "arm"
		}
		if raw != "" {
			fields = append(fields, fmt.Sprintf(`"%s":%s`, p.name, raw))
		}
	}
	if apart && open["entry without an arm at the time of entry"] {
		d.at += 3
	}
	stamp := epoch.Add(d.at)
	if chance(t, "zone", 6) {
		stamp = stamp.In(time.FixedZone("", 3600))
	}
	fields = append([]string{`"ts":"` + stamp.Format(time.RFC3339Nano) + `"`}, fields...)
	d.text = "{" + strings.Join(fields, ",") + "}"
	if odd && chance(t, "malformed", 6) {
		d.text = one(t, "line", broken...)
	}
	d.part = rapid.IntRange(0, parts-1).Draw(t, "partition")
	d.arrives = d.at + delay(t, f.Stream.Lateness)
	c := d
	for f.Stream.ID != "" && chance(t, "again", 8) {
		c.arrives += delay(t, f.Stream.Lateness)
		if parts == 1 && !open["an id that names two events"] && chance(t, "the id names another event", 6) {
			c.text = strings.Replace(c.text, fields[0], `"ts":"`+stamp.Add(one(t, "later", grid, -grid, 4*grid)).Format(time.RFC3339Nano)+`"`, 1)
		}
		if f.Stream.Remember <= f.Stream.Lateness {
			c.part = rapid.IntRange(0, parts-1).Draw(t, "partition")
		}
		d.copies = append(d.copies, c)
	}
	return d
}

// hasPast says whether a study looks at what was before entry.
func hasPast(f *File) bool {
	return slices.ContainsFunc(f.Studies, func(s Study) bool {
		return slices.ContainsFunc(s.Tallies, func(tl Tally) bool { return tl.Before > 0 })
	})
}

func delay(t *rapid.T, lateness time.Duration) time.Duration {
	if lateness == 0 || !chance(t, "delayed", 3) {
		if chance(t, "lost its way", 12) {
			return lateness + one(t, "by", 1, grid, time.Hour, -1)
		}
		return 0
	}
	return time.Duration(rapid.Int64Range(0, int64(lateness/grid)).Draw(t, "delay")) * grid
}

// faults holds the engine against the oracle on one file and stream.
func faults(tr trial, workers int) ([]string, error) {
	dir, err := os.MkdirTemp("", "oracle")
	if err != nil {
		return nil, err
	}
	defer os.RemoveAll(dir)
	c, got, err := engine(dir, tr.file, tr.parts, workers)
	if err != nil {
		return nil, err
	}
	return differences(Arrive(tr.file, tr.parts), tr.file.Every, c, got), nil
}

// String is all it takes to see a difference again.
func (tr trial) String() string {
	var b strings.Builder
	b.WriteString("-- study.yaml\n" + tr.file.YAML("events.jsonl"))
	for i, p := range tr.parts {
		fmt.Fprintf(&b, "-- partition %d\n%s", i, p)
	}
	return b.String()
}

// often checks a property twice as often as rapid does by itself, and a hundred times as often
// with STILLWELL_LONG.
func often(t *testing.T, property func(*rapid.T)) {
	rounds := 2
	if os.Getenv("STILLWELL_LONG") != "" {
		rounds = 100
	}
	for range rounds {
		rapid.Check(t, property)
	}
}

// TestRandomStreams: counters, last readings and the readings at every step are the oracle's.
func TestRandomStreams(t *testing.T) {
	often(t, func(t *rapid.T) {
		tr := trials.Draw(t, "trial")
		diffs, err := faults(tr, rapid.IntRange(1, 2).Draw(t, "workers"))
		if err != nil {
			t.Fatalf("%v\n%s", err, tr)
		}
		if len(diffs) > 0 {
			t.Fatalf("%s\n%s", strings.Join(diffs, "\n"), tr)
		}
	})
}

// TestInterleaving: whichever partition is read first, the bytes of all readings are the same.
func TestInterleaving(t *testing.T) {
	often(t, func(t *rapid.T) {
		f := file(t)
		tr := trial{f, lines(t, f, rapid.IntRange(2, 3).Draw(t, "partitions"))}
		dir, err := os.MkdirTemp("", "oracle")
		if err != nil {
			t.Fatal(err)
		}
		defer func() { _ = os.RemoveAll(dir) }()
		var first []byte
		for workers := range 3 {
			if _, _, err := engine(dir, f, tr.parts, 1+workers%2); err != nil {
				t.Fatalf("%v\n%s", err, tr)
			}
			text, err := os.ReadFile(dir + "/out/readings.jsonl")
			if err != nil {
				t.Fatal(err)
			}
			if first == nil {
				first = text
			}
			if string(text) != string(first) {
				t.Fatalf("one run wrote\n%s\nand another\n%s\n%s", first, text, tr)
			}
		}
	})
}
