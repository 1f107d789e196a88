package main

import (
	"bytes"
	"encoding/json"
	"fmt"
	"io/fs"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"
)

// listing is every file of a folder with its content.
func listing(t *testing.T, dir string) map[string]string {
	t.Helper()
	out := map[string]string{}
	err := filepath.WalkDir(dir, func(path string, d fs.DirEntry, err error) error {
		if err != nil || d.IsDir() {
			return err
		}
		rel, err := filepath.Rel(dir, path)
		if err == nil {
			out[rel] = text(t, path)
		}
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	return out
}

func written(t *testing.T, dir string) replayed {
	t.Helper()
	return replayed{readings: text(t, filepath.Join(dir, "readings.jsonl")), alarms: text(t, filepath.Join(dir, "alarms.jsonl"))}
}

// TestRunAgain: an unchanged file changes nothing, a grown one goes on; from any folder.
func TestRunAgain(t *testing.T) {
	lines := tickets(20, 3000)
	dir := site(t, joined(lines[:1700]))
	put(t, filepath.Join(dir, "study.yaml"), siteStudy("file: {path: events.jsonl}\nreject: {path: rejects.jsonl}", "sinks: {file: {path: readings.jsonl}}\n"))
	lines[1600] = "no event" // and the last step is still open
	put(t, filepath.Join(dir, "events.jsonl"), joined(lines[:1700]))
	whole := filepath.Join(folder(t), "whole.jsonl")
	put(t, whole, joined(lines))
	want := replay(t, dir, "study.yaml", whole)
	half := replay(t, dir, "study.yaml", "events.jsonl")

	invoke(t, dir, exitDone, "run", "study.yaml")
	same(t, written(t, dir), half)
	before := listing(t, dir)
	if len(before) < 7 {
		t.Fatalf("only %d files", len(before))
	}
	for _, from := range []struct{ dir, file string }{{dir, "study.yaml"}, {dir, "./study.yaml"}, {filepath.Dir(dir), filepath.Base(dir) + "/study.yaml"}, {folder(t), filepath.Join(dir, "study.yaml")}} {
		invoke(t, from.dir, exitDone, "run", from.file)
		now := listing(t, dir)
		for name, b := range now {
			if b != before[name] {
				t.Fatalf("run again on an unchanged file from %s, %s has changed", from.dir, name)
			}
		}
		if len(now) != len(before) {
			t.Fatalf("run again on an unchanged file from %s, there are %d files, and were %d", from.dir, len(now), len(before))
		}
	}

	// It grows in the middle of a line, and then to its end.
	put(t, filepath.Join(dir, "events.jsonl"), joined(lines[:2200])+lines[2200][:30])
	invoke(t, filepath.Dir(dir), exitDone, "run", filepath.Join(filepath.Base(dir), "study.yaml"))
	put(t, filepath.Join(dir, "events.jsonl"), joined(lines))
	invoke(t, dir, exitDone, "run", "study.yaml")
	same(t, written(t, dir), want)
	shown, _ := invoke(t, dir, exitDone, "show", "state")
	mentions(t, shown, "malformed 1, late 0,", "\nevents.jsonl ")
	if kept := text(t, filepath.Join(dir, "rejects.jsonl")); strings.Count(kept, "no event") != 1 {
		t.Errorf("the malformed event is not kept once:\n%s", kept)
	}
}

// TestRunMoved: the whole folder, state and outputs and all, goes on elsewhere.
func TestRunMoved(t *testing.T) {
	lines := tickets(21, 2000)
	dir := site(t, joined(lines[:1200]))
	whole := filepath.Join(folder(t), "whole.jsonl")
	put(t, whole, joined(lines))
	want := replay(t, dir, "study.yaml", whole)
	invoke(t, dir, exitDone, "run", filepath.Join(dir, "study.yaml"))
	moved := filepath.Join(folder(t), "moved")
	if err := os.Rename(dir, moved); err != nil {
		t.Fatal(err)
	}
	put(t, filepath.Join(moved, "events.jsonl"), joined(lines))
	invoke(t, moved, exitDone, "run", "study.yaml")
	same(t, written(t, moved), want)
	shown, _ := invoke(t, moved, exitDone, "show", "state")
	mentions(t, shown, "malformed 0, late 0,", "\nevents.jsonl ")
	for name := range listing(t, moved) {
		if strings.Contains(name, "before") {
			t.Errorf("%s was put away", name)
		}
	}
}

// followed is a site whose daemon follows its file, with rotation of the readings.
func followed(t *testing.T, end string) string {
	t.Helper()
	dir := site(t, "")
	put(t, filepath.Join(dir, "follow.yaml"), siteStudy("file: {path: events.jsonl, follow: true}", end))
	return dir
}

const plainSinks = "sinks: {file: {path: readings.jsonl}}\nstate: {every: 5ms}\n"

// grow adds bytes to a file that is being followed.
func grow(t *testing.T, dir, text string) {
	t.Helper()
	f, err := os.OpenFile(filepath.Join(dir, "events.jsonl"), os.O_APPEND|os.O_WRONLY, 0)
	if err != nil {
		t.Fatal(err)
	}
	_, err = f.WriteString(text)
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	if err != nil {
		t.Fatal(err)
	}
}

// has waits until the readings hold a number of lines.
func has(t *testing.T, dir string, n int) {
	t.Helper()
	until(t, fmt.Sprintf("%d lines of readings", n), func() bool {
		b, err := os.ReadFile(filepath.Join(dir, "readings.jsonl"))
		return err == nil && bytes.Count(b, []byte("\n")) >= n
	})
}

// unfinished is what a replay says before its last view, which a daemon that follows never takes.
func unfinished(r replayed) string {
	var out []string
	for _, line := range strings.SplitAfter(r.readings, "\n") {
		if !strings.Contains(line, `"final":true`) {
			out = append(out, line)
		}
	}
	return strings.Join(out, "")
}

// TestFollowed: a daemon is stopped and killed as the file grows, by any number of bytes and with
// all kinds of malformed events, and what it leaves is what one that was never stopped makes
// of the good events. Meanwhile it can be looked at, and a second one is refused.
func TestFollowed(t *testing.T) {
	lines := tickets(22, 3000)
	mixed, _ := mixIn(lines, badLines(), 22)
	dir := followed(t, plainSinks)
	put(t, filepath.Join(dir, "follow.yaml"), siteStudy(fmt.Sprintf("file: {path: events.jsonl, follow: true}\nmax_line: %dB\nreject: {path: rejects.jsonl}", longest), plainSinks))
	whole := filepath.Join(folder(t), "whole.jsonl")
	put(t, whole, joined(lines))
	want := unfinished(replay(t, dir, "follow.yaml", whole))
	total := strings.Count(want, "\n")

	rng := rand.New(rand.NewPCG(22, 0))
	fed := 0
	for round := range 6 {
		p := launch(t, dir, nil, "run", "follow.yaml")
		if round == 0 {
			until(t, "the lock", func() bool { return fileHas(filepath.Join(dir, "state", "lock"), fmt.Sprint(p.Process.Pid)) })
			_, stderr := invoke(t, dir, exitFailed, "run", "follow.yaml")
			mentions(t, stderr, "state", fmt.Sprintf("process %d", p.Process.Pid), "stop it, or name another directory")
		}
		for range 5 {
			n := fed + rng.IntN(len(mixed)/25)
			grow(t, dir, mixed[fed:n])
			fed = n
			time.Sleep(time.Duration(rng.IntN(30)) * time.Millisecond)
		}
		if round == 1 {
			until(t, "a checkpoint to show", func() bool {
				p := launch(t, dir, nil, "show", "state", "--json")
				if p.end() != exitDone {
					return false
				}
				var c struct {
					Sequence   int64
					Settled    map[string]int64
					Partitions []struct{ Name string }
					Studies    map[string]struct{ Outcomes map[string]int64 }
				}
				if err := json.Unmarshal([]byte(p.out.String()), &c); err != nil {
					t.Fatalf("%v\n%s", err, p.out)
				}
				return c.Sequence > 0 && c.Settled["read"] > 0 && c.Partitions[0].Name == "events.jsonl" && c.Studies["seat-map"].Outcomes["applied"] > 0
			})
			stdout, _ := invoke(t, dir, exitDone, "show", "state")
			mentions(t, stdout, "checkpoint", "events.jsonl", "study seat-map", "study payments", "delivered")
		}
		if round%2 == 0 {
			p.terminated()
		} else if err := p.Process.Signal(syscall.SIGKILL); err != nil {
			t.Fatal(err)
		}
		<-p.done
	}
	p := launch(t, dir, nil, "run", "follow.yaml")
	grow(t, dir, mixed[fed:])
	has(t, dir, total)
	if err := p.Process.Signal(os.Interrupt); err != nil {
		t.Fatal(err)
	}
	if code := p.end(); code != exitDone {
		t.Fatalf("exit %d after SIGINT\n%s", code, p.errout)
	}
	same(t, replayed{readings: text(t, filepath.Join(dir, "readings.jsonl"))}, replayed{readings: want})
}

func fileHas(path, part string) bool {
	b, err := os.ReadFile(path)
	return err == nil && bytes.Contains(b, []byte(part))
}

// TestRotated: readings are put aside as they grow, the youngest are kept, and the daemon goes on
// through crashes.
func TestRotated(t *testing.T) {
	lines := tickets(23, 3000)
	dir := followed(t, "sinks: {file: {path: readings.jsonl, rotate: {size: 32KiB, keep: 3}}}\nstate: {every: 5ms}\n")
	whole := filepath.Join(folder(t), "whole.jsonl")
	put(t, whole, joined(lines))
	want := unfinished(replay(t, dir, "follow.yaml", whole))
	for i := range 6 {
		p := launch(t, dir, nil, "run", "follow.yaml")
		grow(t, dir, joined(lines[i*500:(i+1)*500]))
		newest := joined(lines[:(i+1)*500])
		put(t, whole, newest)
		tail := unfinished(replay(t, dir, "follow.yaml", whole))
		last := tail[strings.LastIndexByte(tail[:len(tail)-1], '\n')+1:]
		until(t, "the last reading, and a checkpoint", func() bool {
			select {
			case <-p.done:
				t.Fatalf("round %d: ended by itself\n%s", i, p.errout)
			default:
			}
			found := false
			names, _ := filepath.Glob(filepath.Join(dir, "readings*.jsonl"))
			for _, name := range names {
				b, _ := os.ReadFile(name) // it may just be put aside
				found = found || bytes.HasSuffix(b, []byte(last))
			}
			saved, err := filepath.Glob(filepath.Join(dir, "state", "*.checkpoint"))
			return found && err == nil && len(saved) > 0
		})
		if i%2 == 0 {
			_ = p.Process.Kill()
			<-p.done
		} else {
			p.terminated()
		}
	}
	for range 2 { // what two checkpoints no longer need may go
		p := launch(t, dir, nil, "run", "follow.yaml")
		until(t, "the lock", func() bool { return fileHas(filepath.Join(dir, "state", "lock"), fmt.Sprint(p.Process.Pid)) })
		p.terminated()
	}
	var aside []int
	for name := range listing(t, dir) {
		var n int
		if _, err := fmt.Sscanf(name, "readings-%d.jsonl", &n); err == nil {
			aside = append(aside, n)
		}
		if strings.Contains(name, "before") {
			t.Errorf("%s was put away", name)
		}
	}
	last := 0
	for _, n := range aside {
		last = max(last, n)
	}
	if last < 5 || len(aside) != 3 {
		t.Errorf("put aside and kept: %v, want the three youngest of several", aside)
	}
	kept := ""
	for n := last - 2; n <= last; n++ {
		b := text(t, filepath.Join(dir, fmt.Sprintf("readings-%d.jsonl", n)))
		if len(b) < 32<<10 || !strings.HasSuffix(b, "\n") {
			t.Errorf("readings-%d.jsonl was put aside with %d bytes", n, len(b))
		}
		kept += b
	}
	if kept += text(t, filepath.Join(dir, "readings.jsonl")); !strings.HasSuffix(want, kept) {
		t.Errorf("the files that were kept hold %d bytes, which are not the last of %d", len(kept), len(want))
	}
}

// TestStdin: a stream on standard input, to its end and to a signal.
func TestStdin(t *testing.T) {
	lines := tickets(25, 2000)
	dir := site(t, joined(lines))
	want := replay(t, dir, "study.yaml", "events.jsonl")
	put(t, filepath.Join(dir, "stdin.yaml"), siteStudy("file: {path: '-'}", "sinks: {file: {path: readings.jsonl}}\n"))
	p := launch(t, dir, strings.NewReader(joined(lines)), "run", "stdin.yaml")
	if code := p.end(); code != exitDone {
		t.Fatalf("exit %d\n%s", code, p.errout)
	}
	same(t, written(t, dir), want)

	for _, args := range [][]string{{"run", "stdin.yaml"}, {"replay", "stdin.yaml", "--from", "-", "--out", "out"}} {
		r, w, err := os.Pipe()
		if err != nil {
			t.Fatal(err)
		}
		p := launch(t, dir, r, args...)
		r.Close()
		if _, err := w.WriteString(joined(lines[:500])); err != nil {
			t.Fatal(err)
		}
		time.Sleep(200 * time.Millisecond) // until it reads
		if err := p.Process.Signal(syscall.SIGTERM); err != nil {
			t.Fatal(err)
		}
		code := p.end()
		w.Close()
		if args[0] == "run" && code != exitDone {
			t.Errorf("run: exit %d after SIGTERM\n%s", code, p.errout)
		}
		if args[0] == "replay" {
			if code != exitFailed {
				t.Errorf("replay: exit %d after SIGTERM, and its output is not complete", code)
			}
			mentions(t, p.errout.String(), "stopped before the end", "out")
		}
	}
}
