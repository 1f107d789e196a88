//go:build linux

package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"
)

// disk is a small disk of its own, in memory, as a folder of dir.
func disk(t *testing.T, dir, name, size string, flags uintptr) string {
	t.Helper()
	path := filepath.Join(dir, name)
	if err := os.Mkdir(path, 0o755); err != nil {
		t.Fatal(err)
	}
	err := syscall.Mount("tmpfs", path, "tmpfs", flags, "size="+size)
	if errors.Is(err, syscall.EPERM) || errors.Is(err, syscall.EACCES) {
		t.Skipf("a disk of its own needs the right to mount: %v", err)
	}
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := syscall.Unmount(path, syscall.MNT_DETACH); err != nil {
			t.Error(err)
		}
	})
	return path
}

// fill takes all the room that a disk has left, and returns how to give it back.
func fill(t *testing.T, disk string) (free func()) {
	t.Helper()
	path := filepath.Join(disk, "ballast")
	f, err := os.Create(path)
	if err != nil {
		t.Fatal(err)
	}
	for chunk := make([]byte, 4<<10); err == nil; {
		_, err = f.Write(chunk)
	}
	if !errors.Is(err, syscall.ENOSPC) {
		t.Fatal(err)
	}
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	return func() {
		if err := os.Remove(path); err != nil {
			t.Fatal(err)
		}
	}
}

// TestFullState: a full disk under the state leaves the stream going, and when there is room
// again the next checkpoint holds everything.
func TestFullState(t *testing.T) {
	lines := tickets(30, 3000)
	dir := followed(t, plainSinks)
	state := disk(t, dir, "state", "4m", 0)
	whole := filepath.Join(folder(t), "whole.jsonl")
	lastOf := func(n int) string {
		put(t, whole, joined(lines[:n]))
		all := unfinished(replay(t, dir, "follow.yaml", whole))
		return all[strings.LastIndexByte(all[:len(all)-1], '\n')+1:]
	}
	reaches := func(n int) {
		t.Helper()
		last := lastOf(n)
		until(t, "the last reading", func() bool {
			b, err := os.ReadFile(filepath.Join(dir, "readings.jsonl"))
			return err == nil && strings.HasSuffix(string(b), last)
		})
	}
	sequence := func() (n int64) {
		var c struct{ Sequence int64 }
		p := launch(t, dir, nil, "show", "state", "--json")
		if p.end() == exitDone {
			if err := json.Unmarshal([]byte(p.out.String()), &c); err != nil {
				t.Fatal(err)
			}
		}
		return c.Sequence
	}

	p := launch(t, dir, nil, "run", "follow.yaml")
	grow(t, dir, joined(lines[:1000]))
	reaches(1000)
	until(t, "a checkpoint", func() bool { return sequence() > 0 })
	free := fill(t, state)
	before := sequence()
	grow(t, dir, joined(lines[1000:2000]))
	reaches(2000)
	until(t, "a failed checkpoint", func() bool {
		grow(t, dir, "{}\n") // for the keeper to be asked
		return strings.Contains(p.errout.String(), "no checkpoint could be written")
	})
	mentions(t, p.errout.String(), "no space left on device", "the stream goes on")
	if now := sequence(); now != before {
		t.Errorf("checkpoint %d was written to a full disk", now)
	}
	free()
	grow(t, dir, joined(lines[2000:2500]))
	reaches(2500)
	until(t, "the next checkpoint", func() bool { grow(t, dir, "{}\n"); return sequence() > before })
	_ = p.Process.Kill()
	<-p.done

	p = launch(t, dir, nil, "run", "follow.yaml")
	grow(t, dir, joined(lines[2500:]))
	reaches(3000)
	p.terminated()
	put(t, whole, joined(lines))
	want := unfinished(replay(t, dir, "follow.yaml", whole))
	same(t, replayed{readings: text(t, filepath.Join(dir, "readings.jsonl"))}, replayed{readings: want})

	// At the end there must be room, or it is said.
	p = launch(t, dir, nil, "run", "follow.yaml")
	until(t, "the lock", func() bool { return fileHas(filepath.Join(state, "lock"), fmt.Sprint(p.Process.Pid)) })
	fill(t, state)
	if err := p.Process.Signal(syscall.SIGTERM); err != nil {
		t.Fatal(err)
	}
	if code := p.end(); code != exitFailed {
		t.Errorf("exit %d, and the last checkpoint could not be written", code)
	}
	mentions(t, p.errout.String(), "no space left on device")
}

// TestFullSink: a full disk under the readings ends the daemon with a clear error, and no torn
// line; with room again it goes on.
func TestFullSink(t *testing.T) {
	lines := tickets(31, 2000)
	dir := site(t, joined(lines))
	out := disk(t, dir, "out", "256k", 0)
	put(t, filepath.Join(dir, "study.yaml"), siteStudy("file: {path: events.jsonl}", "sinks: {file: {path: out/readings.jsonl}}\nstate: {every: 1ms}\n"))
	want := replay(t, dir, "study.yaml", "events.jsonl")
	if len(want.readings) < 300<<10 {
		t.Fatalf("%d bytes of readings are too few to fill the disk", len(want.readings))
	}
	for range 2 {
		_, stderr := invoke(t, dir, exitFailed, "run", "study.yaml")
		mentions(t, stderr, "file sink", "out/", "no space left on device", "make room and start again")
		got := text(t, filepath.Join(out, "readings.jsonl"))
		if !strings.HasPrefix(want.readings, got) || !strings.HasSuffix(got, "\n") {
			t.Errorf("the full disk holds %d bytes that are not whole lines of the %d", len(got), len(want.readings))
		}
	}
	if err := syscall.Mount("", out, "", syscall.MS_REMOUNT, "size=4m"); err != nil {
		t.Fatal(err)
	}
	invoke(t, dir, exitDone, "run", "study.yaml")
	same(t, written(t, out), want)
}

// TestFullRejects: malformed events that cannot be kept are counted all the same, and kept again
// when there is room.
func TestFullRejects(t *testing.T) {
	lines := tickets(32, 2000)
	dir := followed(t, plainSinks)
	rejects := disk(t, dir, "rejects", "64k", 0)
	put(t, filepath.Join(dir, "follow.yaml"), siteStudy("file: {path: events.jsonl, follow: true}\nreject: {path: rejects/events.jsonl}", plainSinks))
	whole := filepath.Join(folder(t), "whole.jsonl")
	put(t, whole, joined(lines))
	want := unfinished(replay(t, dir, "follow.yaml", whole))
	p := launch(t, dir, nil, "run", "follow.yaml")
	grow(t, dir, joined(lines[:100])+strings.Repeat("early\n", 10)+joined(lines[100:500]))
	until(t, "the first to be kept", func() bool { return fileHas(filepath.Join(rejects, "events.jsonl"), `"early"`) })
	free := fill(t, rejects) // but for what is left of the last page of the file
	grow(t, dir, strings.Repeat("later\n", 100)+joined(lines[500:1500]))
	until(t, "the full disk to be noticed", func() bool { return strings.Contains(p.errout.String(), "cannot be kept, only counted") })
	time.Sleep(100 * time.Millisecond) // for the rest of the hundred, or there is nothing to see
	free()
	grow(t, dir, "kept\n"+joined(lines[1500:]))
	until(t, "the malformed event to be kept", func() bool { return fileHas(filepath.Join(rejects, "events.jsonl"), `"kept"`) })
	has(t, dir, strings.Count(want, "\n"))
	p.terminated()
	same(t, replayed{readings: text(t, filepath.Join(dir, "readings.jsonl"))}, replayed{readings: want})
	for _, line := range strings.Split(strings.TrimSuffix(text(t, filepath.Join(rejects, "events.jsonl")), "\n"), "\n") {
		if !json.Valid([]byte(line)) {
			t.Errorf("a torn line among the rejects: %.100q", line)
		}
	}
	if kept := text(t, filepath.Join(rejects, "events.jsonl")); strings.Count(kept, `"early"`) != 10 || strings.Count(kept, `"later"`) == 0 || strings.Count(kept, `"later"`) == 100 {
		t.Errorf("kept:\n%s", kept)
	}
	stdout, _ := invoke(t, dir, exitDone, "show", "state")
	mentions(t, stdout, "malformed 111")
	mentions(t, p.errout.String(), "cannot be kept, only counted", "no space left on device")
}

// TestReadOnly stands for missing rights, which root does not lack.
func TestReadOnly(t *testing.T) {
	dir := site(t, joined(tickets(33, 100)))
	disk(t, dir, "ro", "64k", syscall.MS_RDONLY)
	for _, tt := range []struct{ stream, end string }{
		{"", "sinks: {file: {path: ro/readings.jsonl}}\n"},
		{"", "state: {dir: ro/state}\n"},
		{"", "state: {dir: ro}\n"},
		{"\nreject: {path: ro/rejects.jsonl}", ""},
	} {
		put(t, filepath.Join(dir, "ro.yaml"), siteStudy("file: {path: events.jsonl}"+tt.stream, tt.end))
		_, stderr := invoke(t, dir, exitFailed, "run", "ro.yaml")
		mentions(t, stderr, "read-only file system", "ro/")
	}
	_, stderr := invoke(t, dir, exitFailed, "replay", "study.yaml", "--from", "events.jsonl", "--out", "ro")
	mentions(t, stderr, "read-only file system", "ro")
	_, stderr = invoke(t, dir, exitFailed, "replay", "study.yaml", "--from", "events.jsonl", "--out", "ro/out")
	mentions(t, stderr, "read-only file system", "ro/out", "name another")
}
