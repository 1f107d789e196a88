package main

import (
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
)

// TestHelp: every command says what it does, with an example that names it.
func TestHelp(t *testing.T) {
	dir := folder(t)
	top, _ := invoke(t, dir, exitDone, "--help")
	listed := regexp.MustCompile(`(?m)^  ([a-z]+)  `).FindAllStringSubmatch(top[strings.Index(top, "Available"):], -1)
	if len(listed) < 5 {
		t.Fatalf("found %d commands in\n%s", len(listed), top)
	}
	mentions(t, top, "Examples:", "stillwell run")
	for _, c := range listed {
		help, stderr := invoke(t, dir, exitDone, c[1], "--help")
		_, example, ok := strings.Cut(help, "Examples:\n")
		if !ok || !strings.Contains(strings.SplitN(example, "\n\n", 2)[0], "stillwell "+c[1]) {
			t.Errorf("%s --help has no example of it:\n%s", c[1], help)
		}
		again, _ := invoke(t, dir, exitDone, "help", c[1])
		if stderr != "" || again[:100] != help[:100] {
			t.Errorf("help %s is not %s --help; standard error %q", c[1], c[1], stderr)
		}
	}
}

// TestWrongArguments: exit 2, nothing on standard output, and a message with a remedy.
func TestWrongArguments(t *testing.T) {
	dir := site(t, joined(tickets(9, 50)))
	put(t, filepath.Join(dir, "wrong.yaml"), strings.Replace(siteStudy("file: {path: events.jsonl}", ""), "lateness", "latness", 1))
	for _, tt := range []struct {
		args  string
		parts []string
	}{
		{"bogus", []string{`"bogus"`, "see stillwell --help"}},
		{"rum study.yaml", []string{`"rum"`, "did you mean run?"}},
		{"help bogus", []string{`"bogus"`}},
		{"--bogus", []string{"--bogus", "see stillwell --help"}},
		{"demo more", []string{`"more"`, "see stillwell demo --help"}},
		{"demo --speed 0", []string{"--speed 0", "above 0"}},
		{"demo --speed NaN", []string{"--speed NaN", "above 0"}},
		{"demo --speed 1e300", []string{"--speed 1e+300", "at most"}},
		{"demo --for -2h", []string{"--for", "-2h", "48h or 7d"}},
		{"demo --for soon", []string{"--for", "soon", "48h or 7d"}},
		{"check", []string{"one study file", "see stillwell check --help"}},
		{"check study.yaml wrong.yaml", []string{"one study file, got 2"}},
		{"check nowhere.yaml", []string{"nowhere.yaml", "no such file", "check the path"}},
		{"check wrong.yaml", []string{"wrong.yaml:5:3", "latness", "did you mean `lateness`?"}},
		{"run", []string{"one study file", "see stillwell run --help"}},
		{"run nowhere.yaml", []string{"nowhere.yaml", "no such file", "check the path"}},
		{"run wrong.yaml", []string{"wrong.yaml:5:3", "latness"}},
		{"run .", []string{"study file", "directory"}},
		{"run study.yaml --fresh seatmap", []string{"seatmap", "no such study", "seat-map"}},
		{"run study.yaml --workers -1", []string{"--workers -1", "from 1 on"}},
		{"run study.yaml --workers two", []string{"--workers", "two", "see stillwell run --help"}},
		{"run study.yaml --bogus", []string{"--bogus", "see stillwell run --help"}},
		{"replay --from events.jsonl --out out", []string{"one study file"}},
		{"replay study.yaml --out out", []string{"--from DATA", "standard input"}},
		{"replay study.yaml --from= --out out", []string{"--from DATA"}},
		{"replay study.yaml --from events.jsonl", []string{"--out DIR"}},
		{"replay study.yaml --from events.jsonl --out out --workers -2", []string{"--workers -2"}},
		{"replay wrong.yaml --from events.jsonl --out out", []string{"wrong.yaml:5:3", "latness"}},
		{"show", []string{"one state directory", "see stillwell show --help"}},
		{"show state state", []string{"one state directory, got 2"}},
		{"show state --yaml", []string{"--yaml"}},
	} {
		stdout, stderr := invoke(t, dir, exitWrong, strings.Fields(tt.args)...)
		mentions(t, stderr, tt.parts...)
		if stdout != "" {
			t.Errorf("%s: standard output %q", tt.args, stdout)
		}
	}
	if _, err := os.Stat(filepath.Join(dir, "out")); err == nil {
		t.Error("a folder was made for a replay that was refused")
	}
	if _, err := os.Stat(filepath.Join(dir, "state")); err == nil {
		t.Error("a state directory was made for a run that was refused")
	}
}

// TestFailures: exit 1 where the file and the arguments are right, and the world is not.
func TestFailures(t *testing.T) {
	dir := site(t, joined(tickets(9, 50)))
	put(t, filepath.Join(dir, "nosink.yaml"), siteStudy("file: {path: events.jsonl}", "sinks: {file: {path: no/readings.jsonl}}\n"))
	put(t, filepath.Join(dir, "badstate.yaml"), siteStudy("file: {path: events.jsonl}", "state: {dir: events.jsonl}\n"))
	put(t, filepath.Join(dir, "badreject.yaml"), siteStudy("file: {path: events.jsonl}\nreject: {path: no/rejects.jsonl}", ""))
	put(t, filepath.Join(dir, "port.yaml"), siteStudy("file: {path: events.jsonl}", "sinks: {prometheus: {listen: '192.0.2.1:9464'}}\n"))
	if err := os.Mkdir(filepath.Join(dir, "empty"), 0o755); err != nil {
		t.Fatal(err)
	}
	for _, tt := range []struct {
		args  string
		parts []string
	}{
		{"run nosink.yaml", []string{"no does not exist", "make it, or name another path"}},
		{"run badstate.yaml", []string{"events.jsonl"}},
		{"run badreject.yaml", []string{"stream.reject", "no/rejects.jsonl"}},
		{"run port.yaml", []string{"192.0.2.1:9464"}},
		{"replay study.yaml --from events.jsonl --out events.jsonl", []string{"events.jsonl", "cannot be made", "name another"}},
		{"replay study.yaml --from events.jsonl --out /proc/stillwell/out", []string{"/proc/stillwell", "cannot be made", "name another"}},
		{"show nowhere", []string{"nowhere", "no such file", "state.dir"}},
		{"show events.jsonl", []string{"events.jsonl", "not a directory"}},
		{"show empty", []string{"empty", "no checkpoint"}},
	} {
		stdout, stderr := invoke(t, dir, exitFailed, strings.Fields(tt.args)...)
		mentions(t, stderr, tt.parts...)
		if stdout != "" {
			t.Errorf("%s: standard output %q", tt.args, stdout)
		}
	}
	left, err := os.ReadDir(filepath.Join(dir, "empty"))
	if err != nil || len(left) != 0 {
		t.Errorf("show left %v, %v in a directory it only looks at", left, err)
	}
}

// TestCheck: what check has to say is on standard output, once; run logs what is worth a word.
func TestCheck(t *testing.T) {
	dir := site(t, "")
	stdout, stderr := invoke(t, dir, exitDone, "check", "study.yaml")
	mentions(t, stdout, "fare_per_passenger", "share_slow", "seat-map")
	put(t, filepath.Join(dir, "open.yaml"), siteStudy("file: {path: events.jsonl}", "sinks: {prometheus: {listen: '0.0.0.0:0'}}\n"))
	open, warned := invoke(t, dir, exitDone, "check", "open.yaml")
	mentions(t, open, "open.yaml:", "asks for no password")
	if stderr != "" || warned != "" || strings.Count(open, "asks for no password") != 1 {
		t.Errorf("standard error %q and %q; want the remark once, on standard output:\n%s", stderr, warned, open)
	}
	_, logged := invoke(t, dir, exitDone, "run", "open.yaml")
	mentions(t, logged, "open.yaml:", "asks for no password")
}

// TestApart: what is read is not written over, by whatever name it goes.
func TestApart(t *testing.T) {
	dir := site(t, joined(tickets(13, 200)))
	if err := os.Symlink("events.jsonl", filepath.Join(dir, "link.jsonl")); err != nil {
		t.Fatal(err)
	}
	if err := os.Link(filepath.Join(dir, "events.jsonl"), filepath.Join(dir, "readings.jsonl")); err != nil {
		t.Fatal(err)
	}
	before := listing(t, dir)
	refused := func(args string, parts ...string) {
		t.Helper()
		_, stderr := invoke(t, dir, exitFailed, strings.Fields(args)...)
		mentions(t, stderr, append(parts, "name another path")...)
		for name, b := range listing(t, dir) {
			if b != before[name] && name != "own.yaml" {
				t.Fatalf("%s has changed", name)
			}
		}
	}
	refused("replay study.yaml --from events.jsonl --out .", "events.jsonl", "readings.jsonl")
	refused("replay study.yaml --from link.jsonl --out .", "link.jsonl", "readings.jsonl")
	for _, lines := range [][2]string{
		{"", "sinks: {file: {path: link.jsonl}}\n"},
		{"", "sinks: {file: {path: own.yaml}}\n"},
		{"", "sinks: {file: {path: r.jsonl, alarms: own.yaml}}\n"},
		{"\nreject: {path: link.jsonl}", ""},
	} {
		put(t, filepath.Join(dir, "own.yaml"), siteStudy("file: {path: events.jsonl}"+lines[0], lines[1]))
		refused("run own.yaml", "is read, and what is written")
		if text(t, filepath.Join(dir, "own.yaml")) != siteStudy("file: {path: events.jsonl}"+lines[0], lines[1]) {
			t.Error("the study file has changed")
		}
	}
}

// TestReplayIgnores: replay takes no notice of state and sinks, and of what is already there.
func TestReplayIgnores(t *testing.T) {
	lines := tickets(10, 1500)
	dir := site(t, joined(lines))
	put(t, filepath.Join(dir, "loud.yaml"), siteStudy("file: {path: elsewhere.jsonl, follow: true}\nreject: {path: no/rejects.jsonl}",
		"sinks: {file: {path: no/readings.jsonl}, prometheus: {listen: '192.0.2.1:9464'}}\nstate: {dir: events.jsonl}\n"))
	want, got := replay(t, dir, "study.yaml", "events.jsonl"), replay(t, dir, "loud.yaml", "events.jsonl")
	same(t, got, want)
	if got.stderr != "" {
		t.Errorf("standard error is no terminal, and holds %q", got.stderr)
	}
	for _, name := range []string{"state", "readings.jsonl", "no"} {
		if _, err := os.Stat(filepath.Join(dir, name)); err == nil {
			t.Errorf("replay made %s", name)
		}
	}

	// Again into a folder that holds an earlier, longer replay and a copy of it.
	out := filepath.Join(dir, "out")
	invoke(t, dir, exitDone, "replay", "study.yaml", "--from", "events.jsonl", "--out", out)
	put(t, filepath.Join(out, "readings-1.jsonl"), "a copy")
	put(t, filepath.Join(dir, "few.jsonl"), joined(lines[:700]))
	few := replay(t, dir, "study.yaml", "few.jsonl")
	invoke(t, dir, exitDone, "replay", "study.yaml", "--from", "few.jsonl", "--out", out)
	same(t, replayed{readings: text(t, filepath.Join(out, "readings.jsonl")), alarms: text(t, filepath.Join(out, "alarms.jsonl"))}, few)
	put(t, filepath.Join(dir, "none.jsonl"), "")
	invoke(t, dir, exitDone, "replay", "study.yaml", "--from", "none.jsonl", "--out", out)
	if r, a := text(t, filepath.Join(out, "readings.jsonl")), text(t, filepath.Join(out, "alarms.jsonl")); r != "" || a != "" {
		t.Errorf("a replay of nothing left %d bytes of readings and %d of alarms of the one before", len(r), len(a))
	}
	if text(t, filepath.Join(out, "readings-1.jsonl")) != "a copy" {
		t.Error("a file beside the readings was changed")
	}

	// A wrong path leaves what is there.
	invoke(t, dir, exitDone, "replay", "study.yaml", "--from", "few.jsonl", "--out", out)
	invoke(t, dir, exitFailed, "replay", "study.yaml", "--from", "fewer.jsonl", "--out", out)
	same(t, replayed{readings: text(t, filepath.Join(out, "readings.jsonl")), alarms: text(t, filepath.Join(out, "alarms.jsonl"))}, few)
	var c counters
	if err := json.Unmarshal([]byte(text(t, filepath.Join(out, "counters.json"))), &c); err != nil || c.String() != few.counters.String() {
		t.Errorf("counters %s, %v", c, err)
	}
}

// TestReplayFrom: several files, patterns and standard input are the same events.
func TestReplayFrom(t *testing.T) {
	lines := tickets(11, 2000)
	dir := site(t, joined(lines))
	want := replay(t, dir, "study.yaml", "events.jsonl")
	parts := make([]string, 3)
	for i, line := range lines {
		parts[i%3] += line + "\n"
	}
	for i, part := range parts {
		put(t, filepath.Join(dir, fmt.Sprintf("part-%d.jsonl", i)), part)
	}
	for _, from := range [][]string{
		{"./events.jsonl"},
		{filepath.Join(dir, "events.jsonl")},
		{"event?.jsonl"},
		{"events.jsonl", "events.jsonl", "./events.jsonl", "ev*"},
		{"part-0.jsonl", "part-1.jsonl", "part-2.jsonl"},
		{"part-2.jsonl", "part-*.jsonl"},
		{"part-[01].jsonl", "part-2.jsonl"},
	} {
		got := replay(t, dir, "study.yaml", from...)
		same(t, got, want)
		if got.counters.String() != want.counters.String() {
			t.Errorf("%v: counters\n got %s\nwant %s", from, got.counters, want.counters)
		}
		if t.Failed() {
			t.Fatalf("from %v", from)
		}
	}

	p := launch(t, dir, strings.NewReader(joined(lines)), "replay", "study.yaml", "--from", "-", "--out", "out")
	if code := p.end(); code != exitDone {
		t.Fatalf("exit %d\n%s", code, p.errout)
	}
	same(t, replayed{readings: text(t, filepath.Join(dir, "out", "readings.jsonl")), alarms: text(t, filepath.Join(dir, "out", "alarms.jsonl"))}, want)
	p = launch(t, dir, strings.NewReader(parts[1]), "replay", "study.yaml", "--from", "-", "--from", "part-0.jsonl", "--from", "part-2.jsonl", "--out", "out")
	if code := p.end(); code != exitDone {
		t.Fatalf("exit %d\n%s", code, p.errout)
	}
	same(t, replayed{readings: text(t, filepath.Join(dir, "out", "readings.jsonl")), alarms: text(t, filepath.Join(dir, "out", "alarms.jsonl"))}, want)
}

// TestWorkers: how many take part does not show.
func TestWorkers(t *testing.T) {
	dir := site(t, joined(tickets(12, 2000)))
	want := replay(t, dir, "study.yaml", "events.jsonl")
	for _, n := range []string{"1", "2", "7"} {
		invoke(t, dir, exitDone, "replay", "study.yaml", "--from", "events.jsonl", "--out", n, "--workers", n)
		same(t, replayed{readings: text(t, filepath.Join(dir, n, "readings.jsonl")), alarms: text(t, filepath.Join(dir, n, "alarms.jsonl"))}, want)
	}
}

// TestDemo: it ends by itself, or by Ctrl-C, and says where everything is.
func TestDemo(t *testing.T) {
	dir := folder(t)
	t.Setenv("TMPDIR", dir)
	stdout, stderr := invoke(t, dir, exitDone, "demo", "--for", "0.5d", "--speed", "1e6", "--listen=")
	mentions(t, stdout, "ferry company", "fare_per_passenger", "share_slow", "What to try next", "stillwell show "+dir)
	if stderr != "" {
		t.Errorf("standard error: %s", stderr)
	}
	found, err := filepath.Glob(filepath.Join(dir, "stillwell-demo-*"))
	if err != nil || len(found) != 1 {
		t.Fatalf("%v, %v: want one folder", found, err)
	}
	if text(t, filepath.Join(found[0], "readings.jsonl")) == "" {
		t.Error("the demo wrote no readings")
	}
	invoke(t, dir, exitDone, "check", filepath.Join(found[0], "study.yaml"))
	invoke(t, dir, exitDone, "show", filepath.Join(found[0], "state"))

	p := launch(t, dir, nil, "demo", "--for", "0s", "--listen=")
	until(t, "the demo to begin", func() bool { return strings.Contains(p.out.String(), "ferry company") })
	if err := p.Process.Signal(os.Interrupt); err != nil {
		t.Fatal(err)
	}
	if code := p.end(); code != exitDone {
		t.Errorf("exit %d after Ctrl-C\n%s", code, p.errout)
	}
	mentions(t, p.out.String(), "What to try next")
}
