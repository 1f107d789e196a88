package main

import (
	"bytes"
	"compress/gzip"
	"fmt"
	"path/filepath"
	"strings"
	"testing"
	"time"
	"unicode"
)

// TestRemarkLate: the remark names the line by its number, in plain and compressed files, of JSON
// and CSV, among several; by its byte on standard input; and is silent while few are late.
func TestRemarkLate(t *testing.T) {
	lines := tickets(41, 1200)
	far := strings.Replace(lines[600], `"ts":"2026-`, `"ts":"2027-`, 1)
	far = strings.Replace(far, `"id":"`, `"id":"x`, 1)
	bad := append(append(append([]string{}, lines[:600]...), strings.Repeat("x", 2<<20), "", far), lines[600:]...)
	dir := site(t, joined(lines))
	put(t, filepath.Join(dir, "bad.jsonl"), joined(bad))
	var zip bytes.Buffer
	z := gzip.NewWriter(&zip)
	if _, err := z.Write([]byte(joined(bad))); err != nil {
		t.Fatal(err)
	}
	if err := z.Close(); err != nil {
		t.Fatal(err)
	}
	put(t, filepath.Join(dir, "bad.jsonl.gz"), zip.String())

	for _, path := range []string{"bad.jsonl", "bad.jsonl.gz"} {
		mentions(t, replay(t, dir, "study.yaml", path).stderr, "600 of 1", "Line 603 of "+path+" moved time furthest, by 365d", far, "stream.between", "stream.lateness")
	}
	mentions(t, replay(t, dir, "study.yaml", "events.jsonl", "bad.jsonl").stderr, "Line 603 of bad.jsonl")
	p := launch(t, dir, strings.NewReader(joined(bad)), "replay", "study.yaml", "--from", "-", "--out", "out")
	if code := p.end(); code != exitDone {
		t.Fatalf("exit %d\n%s", code, p.errout)
	}
	mentions(t, p.errout.String(), fmt.Sprintf("The event at byte %d of standard input moved time furthest", strings.Index(joined(bad), far)))

	if stderr := replay(t, dir, "study.yaml", "events.jsonl").stderr; stderr != "" {
		t.Errorf("nothing was late, and it is said: %s", stderr)
	}
	few := append(append([]string{}, lines[:1195]...), far, lines[1195])
	put(t, filepath.Join(dir, "few.jsonl"), joined(few))
	if r := replay(t, dir, "study.yaml", "few.jsonl"); r.stderr != "" || r.counters.Stream["late"] != 1 {
		t.Errorf("one late event of a thousand is worth no remark: %s%s", r.counters, r.stderr)
	}

	put(t, filepath.Join(dir, "csv.yaml"), csvStudy)
	csv := []string{"id,ts,type,passenger,amount"}
	for i := range 300 {
		at := time.Date(2026, 3, 2, i, 0, 0, 0, time.UTC)
		if i == 100 {
			at = at.AddDate(1, 0, 0)
		}
		csv = append(csv, fmt.Sprintf("%d,%s,ticket,p-%d,12", i, at.Format(time.RFC3339), i))
	}
	put(t, filepath.Join(dir, "events.csv"), joined(csv))
	mentions(t, replay(t, dir, "csv.yaml", "events.csv").stderr, "Line 102 of events.csv", csv[101])
}

// TestRemarkMalformed: a study file that asks for what the events do not have is found out, and
// what the events say is only shown.
func TestRemarkMalformed(t *testing.T) {
	lines := tickets(42, 1000)
	dir := site(t, joined(lines))
	put(t, filepath.Join(dir, "wrong.yaml"), strings.Replace(siteStudy("file: {path: events.jsonl}", ""), "time: ts", "time: at", 1))
	stderr := replay(t, dir, "wrong.yaml", "events.jsonl").stderr
	mentions(t, stderr, "1000 of 1000 events (100.0%) were malformed", "Line 1 of events.jsonl was the first", "the event has no time", lines[0][:100])

	evil := "\x1b]0;owned\a\x1b[2J\u009b31m\u202e\xff" + strings.Repeat("x", 500)
	put(t, filepath.Join(dir, "evil.jsonl"), joined(append(append([]string{lines[0], ""}, evil, "later"), lines[1:50]...)))
	for range 3 { // whichever worker comes first
		stderr = replay(t, dir, "study.yaml", "evil.jsonl").stderr
		mentions(t, stderr, "2 of 52 events (3.8%) were malformed", "Line 3 of evil.jsonl was the first", "]0;owned")
		for _, r := range stderr {
			if r != '\n' && !unicode.IsPrint(r) {
				t.Errorf("%U goes to the terminal: %q", r, stderr)
			}
		}
		if len(stderr) > 600 {
			t.Errorf("%d bytes of remarks", len(stderr))
		}
	}
	put(t, filepath.Join(dir, "few.jsonl"), joined(append(append([]string{}, lines...), "x")))
	if stderr := replay(t, dir, "study.yaml", "few.jsonl").stderr; stderr != "" {
		t.Errorf("one malformed event of a thousand is worth no remark: %s", stderr)
	}
}
