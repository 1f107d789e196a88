package main

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"path/filepath"
	"strings"
	"testing"
	"unicode/utf8"
)

// longest is stream.max_line of these tests.
const longest = 2000

// A bad line stands for one way in which an event can be wrong, or merely odd.
type bad struct {
	name string
	line string // TS stands for the time of the event before it, NEXT for the id of the one after it
	// fault is what the line is malformed for; empty: it is an event, and counts in each study
	// as what the maps say, or else as filtered.
	fault             string
	seatMap, payments string
}

// ticket is a ticket with a value for its amount, as written.
func ticket(amount string) string {
	return `{"ts":"TS","type":"ticket","passenger":"p-bad","amount":` + amount + `}`
}

// note is an event that nobody asks for, with one field more.
func note(field string) string { return `{"ts":"TS","type":"note",` + field + `}` }

// filled is a note of a given length.
func filled(n int) string {
	line := strings.ReplaceAll(note(`"fill":""`), "TS", "2026-03-02T10:00:00.000Z")
	return note(`"fill":"` + strings.Repeat("x", n-len(line)) + `"`)
}

func badLines() []bad {
	nested := func(n int) string { return strings.Repeat(`[`, n) + strings.Repeat(`]`, n) }
	return []bad{
		// no JSON, or no object
		{name: "a word", line: "hello", fault: "syntax"},
		{name: "a lone brace", line: "{", fault: "syntax"},
		{name: "a closing brace", line: "}", fault: "syntax"},
		{name: "a list", line: "[1,2]", fault: "not an object"},
		{name: "a number", line: "5", fault: "not an object"},
		{name: "null", line: "null", fault: "not an object"},
		{name: "a text", line: `"x"`, fault: "not an object"},
		{name: "an empty object", line: "{}", fault: "no time"},
		{name: "two objects", line: note(`"a":1`) + note(`"a":1`), fault: "text follows"},
		{name: "a comma too many", line: note(`"a":1,`), fault: "syntax"},
		{name: "single quotes", line: note(`'a':1`), fault: "syntax"},
		{name: "a comment", line: note(`"a":1/**/`), fault: "syntax"},
		{name: "a key without value", line: note(`"a"`), fault: "syntax"},
		{name: "a bare key", line: note(`a:1`), fault: "syntax"},
		{name: "a tab in a text", line: note("\"a\":\"\t\""), fault: "syntax"},
		{name: "a NUL", line: note("\"a\":\"\x00\""), fault: "syntax"},
		{name: "NULs", line: strings.Repeat("\x00", 100), fault: "syntax"},
		{name: "cut short", line: ticket("12.5")[:40], fault: "syntax"},
		{name: "UTF-16", line: "\xff\xfe{\x00\"\x00", fault: "syntax"},
		{name: "a byte order mark", line: "\ufeff" + note(`"a":1`), fault: "syntax"},

		// numbers
		{name: "NaN", line: ticket("NaN"), fault: "syntax"},
		{name: "Infinity", line: ticket("Infinity"), fault: "syntax"},
		{name: "-Infinity", line: ticket("-Infinity"), fault: "syntax"},
		{name: "inf", line: ticket("inf"), fault: "syntax"},
		{name: "a leading zero", line: ticket("012"), fault: "syntax"},
		{name: "a plus", line: ticket("+12"), fault: "syntax"},
		{name: "a bare point", line: ticket(".5"), fault: "syntax"},
		{name: "hexadecimal", line: ticket("0x10"), fault: "syntax"},
		{name: "1e999", line: ticket("1e999"), fault: "not finite"},
		{name: "-1e999", line: ticket("-1e999"), fault: "not finite"},
		{name: "an endless number", line: ticket(strings.Repeat("9", 1500)), fault: "not finite"},
		{name: "an absurd exponent", line: ticket("1e99999999999999999999"), fault: "not finite"},
		{name: "1e999 where nobody asks", line: note(`"amount":1e999`)},

		// wrong types of a value that is tallied
		{name: "a text as value", line: ticket(`"12.5"`), fault: "no number"},
		{name: "an empty text as value", line: ticket(`""`), fault: "no number"},
		{name: "true as value", line: ticket(`true`), fault: "no number"},
		{name: "a list as value", line: ticket(`[12.5]`), fault: "no number"},
		{name: "an object as value", line: ticket(`{"eur":12.5}`), fault: "no number"},
		{name: "the text NaN as value", line: ticket(`"NaN"`), fault: "no number"},
		{name: "the same without key", line: `{"ts":"TS","type":"ticket","amount":"12"}`, fault: "no number"},
		{name: "null as value", line: ticket(`null`)},
		{name: "no value", line: `{"ts":"TS","type":"ticket","passenger":"p-bad"}`},

		// times
		{name: "no time", line: `{"type":"note"}`, fault: "no time"},
		{name: "null as time", line: `{"ts":null,"type":"note"}`, fault: "no time"},
		{name: "a number as time", line: `{"ts":1772449200,"type":"note"}`, fault: "not a string"},
		{name: "1e999 as time", line: `{"ts":1e999,"type":"note"}`, fault: "not a string"},
		{name: "true as time", line: `{"ts":true,"type":"note"}`, fault: "not a string"},
		{name: "an object as time", line: `{"ts":{"at":"TS"},"type":"note"}`, fault: "not a string"},
		{name: "a list as time", line: `{"ts":["TS"],"type":"note"}`, fault: "not a string"},
		{name: "an empty time", line: `{"ts":"","type":"note"}`, fault: "RFC 3339"},
		{name: "a word as time", line: `{"ts":"yesterday at noon, or so","type":"note"}`, fault: "RFC 3339"},
		{name: "a time without zone", line: `{"ts":"2026-03-02T10:00:00","type":"note"}`, fault: "offset"},
		{name: "a day without time", line: `{"ts":"2026-03-02","type":"note"}`, fault: "RFC 3339"},
		{name: "30 February", line: `{"ts":"2026-02-30T10:00:00Z","type":"note"}`, fault: "no such date"},
		{name: "hour 24", line: `{"ts":"2026-03-02T24:00:00Z","type":"note"}`, fault: "no such date"},
		{name: "the year 0", line: `{"ts":"0000-01-01T00:00:00Z","type":"note"}`, fault: "1677 to 2262"},
		{name: "the year 9999", line: `{"ts":"9999-12-31T23:59:59Z","type":"note"}`, fault: "1677 to 2262"},
		{name: "the year 10000", line: `{"ts":"10000-01-01T00:00:00Z","type":"note"}`, fault: "RFC 3339"},
		{name: "before 2000", line: `{"ts":"1999-12-31T23:59:59.999999999Z","type":"note"}`, fault: "between"},
		{name: "the epoch", line: `{"ts":"1970-01-01T00:00:00Z","type":"note"}`, fault: "between"},
		{name: "after 2100", line: `{"ts":"2100-01-01T00:00:00Z","type":"note"}`, fault: "between"},
		{name: "2100 by another clock", line: `{"ts":"2099-12-31T23:00:00-01:00","type":"note"}`, fault: "between"},

		// keys, arms, ids, conditions
		{name: "null as key", line: `{"ts":"TS","type":"visit","passenger":null}`},
		{name: "no key", line: `{"ts":"TS","type":"visit"}`},
		{name: "an object as key", line: `{"ts":"TS","type":"visit","passenger":{"a":1}}`, seatMap: "outside"},
		{name: "a number as key", line: `{"ts":"TS","type":"visit","passenger":1e999}`, seatMap: "outside"},
		{name: "an empty key", line: `{"ts":"TS","type":"visit","passenger":""}`, seatMap: "outside"},
		{name: "a key with a zero byte", line: `{"ts":"TS","type":"visit","passenger":"a\u0000b"}`, seatMap: "outside"},
		{name: "a long key", line: `{"ts":"TS","type":"visit","passenger":"` + strings.Repeat("é", 900) + `"}`, seatMap: "outside"},
		{name: "null as key of an entry", line: `{"ts":"TS","type":"assign","trial":"seat-map","passenger":null,"arm":"wide"}`},
		{name: "no arm", line: `{"ts":"TS","type":"assign","trial":"seat-map","passenger":"p-bad1"}`, seatMap: "outside"},
		{name: "null as arm", line: `{"ts":"TS","type":"assign","trial":"seat-map","passenger":"p-bad2","arm":null}`, seatMap: "outside"},
		{name: "an unknown arm", line: `{"ts":"TS","type":"assign","trial":"seat-map","passenger":"p-bad3","arm":"Wide"}`, seatMap: "outside"},
		{name: "a number as arm", line: `{"ts":"TS","type":"assign","trial":"seat-map","passenger":"p-bad4","arm":5}`, seatMap: "outside"},
		{name: "an object as arm", line: `{"ts":"TS","type":"assign","trial":"seat-map","passenger":"p-bad5","arm":{"is":"wide"}}`, seatMap: "outside"},
		{name: "null as id", line: `{"id":null,"ts":"TS","type":"note"}`},
		{name: "an object as id", line: `{"id":{"n":[1]},"ts":"TS","type":"note"}`},
		{name: "1e999 as id", line: `{"id":1e999,"ts":"TS","type":"note"}`},
		{name: "malformed, with the id of the next", line: `{"id":"NEXT","ts":"TS","type":"ticket","passenger":"p-bad","amount":"x"}`, fault: "no number"},
		{name: "without time, with the id of the next", line: `{"id":"NEXT","type":"note"}`, fault: "no time"},
		{name: "of another century, with the id of the next", line: `{"id":"NEXT","ts":"1926-03-02T10:00:00Z","type":"note"}`, fault: "between"},
		{name: "an empty id", line: `{"id":"","ts":"TS","type":"note"}`},
		{name: "a number as type", line: `{"ts":"TS","type":5,"passenger":"p-bad"}`},
		{name: "a list as type", line: `{"ts":"TS","type":["ticket"],"passenger":"p-bad","amount":"x"}`},
		{name: "null as type", line: `{"ts":"TS","type":null,"passenger":"p-bad","amount":"x"}`},
		{name: "a number as trial", line: `{"ts":"TS","type":"assign","trial":7,"passenger":"p-bad","arm":"wide"}`},
		{name: "null everywhere", line: `{"id":null,"ts":null,"type":null,"passenger":null,"arm":null,"amount":null}`, fault: "no time"},
		{name: "null everywhere else", line: `{"id":null,"ts":"TS","type":null,"trial":null,"passenger":null,"arm":null,"amount":null,"ms":null}`},

		// keys that come twice: the last counts
		{name: "a type that comes twice", line: `{"ts":"TS","type":"ticket","amount":1,"passenger":"p-bad","type":"note"}`},
		{name: "a time that comes twice", line: `{"ts":"TS","type":"note","ts":"soon"}`, fault: "RFC 3339"},
		{name: "an amount that comes twice", line: `{"ts":"TS","type":"ticket","passenger":"p-bad","amount":1,"amount":"x"}`, fault: "no number"},
		{name: "a key that comes twice", line: `{"ts":"TS","type":"visit","passenger":"p-bad","passenger":null}`},

		// depth and length
		{name: "as deep as may be", line: note(`"a":` + nested(510))},
		{name: "too deep", line: note(`"a":` + nested(512)), fault: "too deep"},
		{name: "much too deep", line: note(`"a":` + strings.Repeat("[", longest/2)), fault: "too deep"},
		{name: "nearly too long", line: filled(longest - 1)},
		{name: "as long as may be", line: filled(longest)},
		{name: "one byte too long", line: filled(longest + 1), fault: "longer than"},
		{name: "two bytes too long", line: filled(longest + 2), fault: "longer than"},
		{name: "much too long", line: filled(3_000_000), fault: "longer than"},
		{name: "much too long, and no JSON", line: strings.Repeat("[", 700_000), fault: "longer than"},

		// text
		{name: "a broken byte", line: note("\"a\":\"\xff\""), fault: "utf8"},
		{name: "a broken byte in a key", line: note("\"\xff\":1"), fault: "utf8"},
		{name: "half a letter at the end", line: note("\"a\":\"\xc3\""), fault: "utf8"},
		{name: "an overlong slash", line: note("\"a\":\"\xc0\xaf\""), fault: "utf8"},
		{name: "a surrogate in UTF-8", line: note("\"a\":\"\xed\xa0\x80\""), fault: "utf8"},
		{name: "a lone surrogate", line: note(`"a":"\ud83d"`), fault: "utf8"},
		{name: "a lone second surrogate", line: note(`"a":"\ude00"`), fault: "utf8"},
		{name: "surrogates in the wrong order", line: note(`"a":"\ude00\ud83d"`), fault: "utf8"},
		{name: "a lone surrogate as key of a unit", line: `{"ts":"TS","type":"visit","passenger":"\ud83d"}`, fault: "utf8"},
		{name: "a lone surrogate in a name", line: note(`"\ud83d":1`), fault: "utf8"},
		{name: "a whole pair", line: note(`"a":"\ud83d\ude00"`)},
		{name: "a bad escape", line: note(`"a":"\x41"`), fault: "syntax"},
		{name: "Latin-1", line: note("\"a\":\"F\xe4hre\""), fault: "utf8"},
	}
}

// badEvent is a bad line in its place.
type badEvent struct {
	bad
	at int64 // byte of the file
}

// mixIn puts bad lines among good ones: each kind twice at random places, and one at the
// very end. It returns the file, and where they came to lie.
func mixIn(good []string, kinds []bad, seed uint64) (string, []badEvent) {
	rng := rand.New(rand.NewPCG(seed, 7))
	const after = 5 // good lines before the first bad one that needs a time
	at := map[int][]bad{}
	for _, k := range append(append([]bad{}, kinds...), kinds...) {
		n := after + rng.IntN(len(good)-after)
		at[n] = append(at[n], k)
	}
	var b bytes.Buffer
	var out []badEvent
	put := func(k bad, ts string) {
		line := strings.Replace(k.line, "TS", ts, 1)
		out = append(out, badEvent{k, int64(b.Len())})
		out[len(out)-1].line = line
		b.WriteString(line + []string{"\n", "\r\n"}[rng.IntN(2)])
	}
	for i, line := range good {
		b.WriteString(line + []string{"\n", "\r\n", "\n\n", "\n \t\n"}[rng.IntN(4)])
		ts := line[strings.Index(line, `"ts":"`)+6:][:len("2026-03-02T10:00:00.000Z")]
		next := good[min(i+1, len(good)-1)]
		for _, k := range at[i] {
			k.line = strings.Replace(k.line, "NEXT", next[len(`{"id":"`):][:len("e00000001")], 1)
			put(k, ts)
		}
	}
	put(bad{line: "{", fault: "syntax"}, "")
	return b.String(), out
}

// effect is what bad lines do to the counters.
func effect(events []badEvent) (stream map[string]int64, studies map[string]map[string]int64) {
	stream = map[string]int64{"read": int64(len(events))}
	studies = map[string]map[string]int64{"seat-map": {}, "payments": {}}
	for _, e := range events {
		if e.fault != "" {
			stream["malformed"]++
			continue
		}
		stream["delivered"]++
		for name, outcome := range map[string]string{"seat-map": e.seatMap, "payments": e.payments} {
			if outcome == "" {
				outcome = "filtered"
			}
			studies[name][outcome]++
		}
	}
	return stream, studies
}

// TestBadInput: nothing that a line can hold stops the program or moves a number, and each
// line is counted once.
func TestBadInput(t *testing.T) {
	dir := folder(t)
	good := tickets(1, 3000)
	put(t, filepath.Join(dir, "good.jsonl"), joined(good))
	stream := fmt.Sprintf("file: {path: mixed.jsonl}\nmax_line: %dB\nreject: {path: rejects.jsonl}", longest)
	put(t, filepath.Join(dir, "study.yaml"), siteStudy(stream, "sinks: {file: {path: readings.jsonl}}\nstate: {every: 1ms}\n"))
	want := replay(t, dir, "study.yaml", "good.jsonl")
	if strings.Count(want.readings, "\n") < 100 || want.counters.Stream["duplicate"] == 0 || want.counters.Stream["malformed"] != 0 {
		t.Fatalf("the good events are too tame: %d bytes of readings, %s", len(want.readings), want.counters)
	}
	mixed, events := mixIn(good, badLines(), 1)
	put(t, filepath.Join(dir, "mixed.jsonl"), mixed)

	got := replay(t, dir, "study.yaml", "mixed.jsonl")
	same(t, got, want)
	if sum := want.counters.add(effect(events)); got.counters.String() != sum.String() {
		t.Errorf("counters\n got %s\nwant %s", got.counters, sum)
	}

	invoke(t, dir, exitDone, "run", "study.yaml")
	run := replayed{readings: text(t, filepath.Join(dir, "readings.jsonl")), alarms: text(t, filepath.Join(dir, "alarms.jsonl"))}
	same(t, run, want)
	rejected(t, filepath.Join(dir, "rejects.jsonl"), "mixed.jsonl", events)
}

// rejected wants every malformed line in the file of rejects, with its place and fault.
func rejected(t *testing.T, path, partition string, events []badEvent) {
	t.Helper()
	type reject struct {
		Partition   string
		Position    int64
		Fault, Text string
		Bytes       []byte
	}
	found := map[int64]reject{}
	for _, line := range strings.Split(strings.TrimSuffix(text(t, path), "\n"), "\n") {
		var r reject
		if err := json.Unmarshal([]byte(line), &r); err != nil {
			t.Fatalf("%v: %s", err, line)
		}
		if _, twice := found[r.Position]; twice {
			t.Errorf("the line at %d stands twice among the rejects", r.Position)
		}
		found[r.Position] = r
	}
	for _, e := range events {
		r, ok := found[e.at]
		delete(found, e.at)
		switch {
		case e.fault == "" && ok:
			t.Errorf("%s: rejected for %q, want an event", e.name, r.Fault)
		case e.fault == "":
		case !ok:
			t.Errorf("%s: not among the rejects", e.name)
		case !strings.Contains(r.Fault, e.fault):
			t.Errorf("%s: rejected for %q, want %q", e.name, r.Fault, e.fault)
		case r.Partition != partition:
			t.Errorf("%s: of partition %q, want %q", e.name, r.Partition, partition)
		case !utf8.ValidString(e.line) && string(r.Bytes) != e.line:
			t.Errorf("%s: bytes %q, want %q", e.name, r.Bytes, e.line)
		case utf8.ValidString(e.line) && r.Text != e.line && !strings.HasPrefix(e.line, r.Text):
			t.Errorf("%s: text %.100q, want %.100q", e.name, r.Text, e.line)
		}
	}
	for at, r := range found {
		t.Errorf("rejected, and not bad: %d: %+v", at, r)
	}
}
