package file

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"go.uber.org/zap"
	"go.uber.org/zap/zaptest/observer"

	"stillwell/stream"
)

// A follower is a source at work on one file, in a bubble whose clock it can wait for.
type follower struct {
	t      fataler
	path   string
	cfg    Config
	book   *notebook
	cancel context.CancelFunc
	result chan error
	logs   *observer.ObservedLogs
}

func startFollower(t fataler, cfg Config, from *stream.Position) *follower {
	core, logs := observer.New(zap.InfoLevel)
	cfg.Log, cfg.Follow = zap.New(core), true
	f := &follower{t: t, path: cfg.Paths[0], cfg: cfg, book: newNotebook(), result: make(chan error, 1), logs: logs}
	if from != nil {
		f.book.from[f.path] = *from
	}
	s, err := New(cfg)
	if err != nil {
		t.Fatalf("%v", err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	f.cancel = cancel
	go func() { f.result <- s.Run(ctx, f.book) }()
	return f
}

// settle waits until the follower has seen whatever there is.
func (f *follower) settle() {
	time.Sleep(3 * time.Second)
	synctest.Wait()
}

func (f *follower) stop() {
	f.t.Helper()
	f.cancel()
	if err := <-f.result; err != nil {
		f.t.Fatalf("run: %v", err)
	}
	if faults := f.book.close(); faults != nil {
		f.t.Fatalf("%s", strings.Join(faults, "\n"))
	}
}

// expect settles, and compares all lines so far.
func (f *follower) expect(want ...string) {
	f.t.Helper()
	f.settle()
	if got := f.book.texts(f.path); !reflect.DeepEqual(got, want) {
		f.t.Fatalf("got %q, want %q", got, want)
	}
}

func (f *follower) expectGaps(want ...string) {
	f.t.Helper()
	if !reflect.DeepEqual(f.book.gaps, want) {
		f.t.Fatalf("gaps %q, want %q", f.book.gaps, want)
	}
	if loud := f.logs.FilterLevelExact(zap.ErrorLevel).Len(); loud != len(want) {
		f.t.Fatalf("%d gaps, told loudly %d times", len(want), loud)
	}
}

// after returns the position behind the last line so far.
func (f *follower) after() *stream.Position {
	lines := f.book.lines[f.path]
	last := lines[len(lines)-1]
	return &stream.Position{Offset: last.Offset + int64(len(last.Text)) + 1, Mark: last.Mark}
}

func appendTo(t fataler, path, content string) {
	t.Helper()
	file, err := os.OpenFile(path, os.O_APPEND|os.O_CREATE|os.O_WRONLY, 0o644)
	if err != nil {
		t.Fatalf("%v", err)
	}
	defer file.Close()
	if _, err := file.WriteString(content); err != nil {
		t.Fatalf("%v", err)
	}
}

func rename(t fataler, from, to string) {
	t.Helper()
	if err := os.Rename(from, to); err != nil {
		t.Fatalf("%v", err)
	}
}

// compress packs a file under another name and removes it.
func compress(t fataler, f form, from, to string) {
	t.Helper()
	content, err := os.ReadFile(from)
	if err != nil {
		t.Fatalf("%v", err)
	}
	info, err := os.Stat(from)
	if err != nil {
		t.Fatalf("%v", err)
	}
	write(t, to, string(pack(f, content)))
	if err := os.Chtimes(to, info.ModTime(), info.ModTime()); err != nil {
		t.Fatalf("%v", err)
	}
	if err := os.Remove(from); err != nil {
		t.Fatalf("%v", err)
	}
}

// bubble runs a test on a path in a new folder, with a clock of its own.
func bubble(t *testing.T, name string, run func(t *testing.T, path string)) {
	path := filepath.Join(t.TempDir(), "harbour.jsonl")
	t.Run(name, func(t *testing.T) {
		synctest.Test(t, func(t *testing.T) { run(t, path) })
	})
}

func TestFollow(t *testing.T) {
	bubble(t, "a partial line waits", func(t *testing.T, path string) {
		write(t, path, "one\ntw")
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect("one")
		appendTo(t, path, "o\nthr")
		f.expect("one", "two")
		appendTo(t, path, "ee\n")
		f.expect("one", "two", "three")
		if f.book.caught(path) < 80 || f.book.ended[path] != 0 {
			t.Errorf("caught up %d times in 9 s, ended %d", f.book.caught(path), f.book.ended[path])
		}
	})
	bubble(t, "a file that is not there yet", func(t *testing.T, path string) {
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect()
		if f.logs.Len() != 1 || f.book.caught(path) == 0 {
			t.Errorf("told %d times that the file is not there, want once; caught up %d times", f.logs.Len(), f.book.caught(path))
		}
		write(t, path, "")
		f.expect()
		appendTo(t, path, "(")
		f.expect()
		appendTo(t, path, "one)\n")
		f.expect("(one)")
	})
	bubble(t, "without its folder nothing is known", func(t *testing.T, path string) {
		path = filepath.Join(filepath.Dir(path), "none", "tickets.jsonl")
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect()
		if f.book.caught(path) != 0 {
			t.Errorf("caught up %d times with a file in no folder", f.book.caught(path))
		}
	})
	bubble(t, "renamed", func(t *testing.T, path string) {
		write(t, path, "one\n")
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect("one")
		rename(t, path, path+".1")
		appendTo(t, path+".1", "two\npart")
		before := f.book.caught(path)
		f.expect("one", "two")
		if f.book.caught(path) < before+20 {
			t.Errorf("caught up %d times in 3 s", f.book.caught(path)-before)
		}
		write(t, path, "") // made by the one who rotates, not by the writer
		appendTo(t, path+".1", "ial\nend")
		f.expect("one", "two", "partial")
		appendTo(t, path, "three\n")
		f.expect("one", "two", "partial", "end", "three")
		f.expectGaps()
	})
	bubble(t, "a writer holds on to the old file for a while", func(t *testing.T, path string) {
		write(t, path, "one\n")
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect("one")
		rename(t, path, path+".1")
		write(t, path, "new\n")
		for i := range 5 {
			time.Sleep(f.cfg.Poll + 90*time.Millisecond)
			appendTo(t, path+".1", fmt.Sprintf("old %d\n", i))
		}
		f.expect("one", "old 0", "old 1", "old 2", "old 3", "old 4", "new")
	})
	bubble(t, "rotated several times behind a closed gate, and compressed", func(t *testing.T, path string) {
		write(t, path, "one\n")
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect("one")
		f.book.partitions[0].Hold()
		appendTo(t, path, "two\n")
		rename(t, path, path+".1")
		write(t, path, "three\n")
		f.expect("one")
		compress(t, gzipForm, path+".1", path+".2.gz")
		compress(t, zstdForm, path, path+".1.zst")
		write(t, path, "four\n")
		f.expect("one")
		f.book.partitions[0].Free()
		f.expect("one", "two", "three", "four")
		f.expectGaps()
	})
	bubble(t, "cut at the end of reading", func(t *testing.T, path string) {
		write(t, path, "one\ntwo\n")
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect("one", "two")
		write(t, path, "")
		f.expect("one", "two")
		appendTo(t, path, "three\n")
		f.expect("one", "two", "three")
		write(t, path, "a long line, so that the file is longer than before\n") // grown again before we look
		f.expect("one", "two", "three", "a long line, so that the file is longer than before")
		f.expectGaps()
	})
	bubble(t, "cut with something unread", func(t *testing.T, path string) {
		write(t, path, "one\nunfinished")
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect("one")
		write(t, path, "two\n")
		f.expect("one", "two")
		f.expectGaps("harbour.jsonl 4-14")
	})
	bubble(t, "copied and cut", func(t *testing.T, path string) {
		write(t, path, "one\n")
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect("one")
		write(t, path+".1", "one\ntwo\n")
		write(t, path, "three\n")
		f.expect("one", "two", "three")
		f.expectGaps()
	})
	bubble(t, "copied too early and cut", func(t *testing.T, path string) {
		write(t, path, "one\nunfinished")
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect("one")
		write(t, path+".1", "one\nun")
		write(t, path, "two\n")
		f.expect("one", "un", "two")
		f.expectGaps("harbour.jsonl 6-14")
	})
	bubble(t, "replaced by a longer copy of itself", func(t *testing.T, path string) {
		write(t, path, "one\n")
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect("one")
		write(t, path+".tmp", "one\ntwo\n")
		rename(t, path+".tmp", path)
		f.expect("one", "two")
		f.expectGaps()
	})
	bubble(t, "something is in the way for a while", func(t *testing.T, path string) {
		write(t, path, "one\n")
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect("one")
		rename(t, path, path+".1")
		if err := os.Mkdir(path, 0o755); err != nil {
			t.Fatal(err)
		}
		f.expect("one")
		before := f.book.caught(path)
		f.expect("one")
		if warned := f.logs.FilterLevelExact(zap.WarnLevel).Len(); warned != 1 || f.book.caught(path) != before {
			t.Errorf("warned %d times, want once; caught up %d times, want never", warned, f.book.caught(path)-before)
		}
		if err := os.Remove(path); err != nil {
			t.Fatal(err)
		}
		write(t, path, "two\n")
		f.expect("one", "two")
	})
	bubble(t, "a symbolic link that turns to the next file", func(t *testing.T, path string) {
		dir := t.TempDir()
		write(t, dir+"/harbour-2026-03-01.jsonl", "one\n")
		if err := os.Symlink(dir+"/harbour-2026-03-01.jsonl", path); err != nil {
			t.Fatal(err)
		}
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect("one")
		write(t, dir+"/harbour-2026-03-02.jsonl", "two\n")
		write(t, dir+"/harbour-2026-03-03.jsonl", "three\n")
		write(t, dir+"/quay-2026-03-03.jsonl", "another\n")
		if err := os.Remove(path); err != nil {
			t.Fatal(err)
		}
		if err := os.Symlink(dir+"/harbour-2026-03-03.jsonl", path); err != nil {
			t.Fatal(err)
		}
		f.expect("one", "two", "three")
		f.expectGaps()
	})
	bubble(t, "a compressed file that is still being written", func(t *testing.T, path string) {
		packed := pack(gzipForm, []byte(strings.Repeat("one\n", 100)))
		write(t, path, string(packed[:4]))
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.expect()
		appendTo(t, path, string(packed[4:len(packed)-9]))
		f.settle()
		appendTo(t, path, string(packed[len(packed)-9:]))
		f.settle()
		appendTo(t, path, string(pack(gzipForm, []byte("two\n"))))
		f.settle()
		if got := f.book.texts(path); len(got) != 101 || got[100] != "two" {
			t.Errorf("%d lines: %q", len(got), got)
		}
		f.expectGaps()
	})
	bubble(t, "a damaged file is passed over", func(t *testing.T, path string) {
		packed := pack(gzipForm, []byte("one\ntwo\n"))
		write(t, path, string(packed[:len(packed)-4]))
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		defer f.stop()
		f.settle()
		rename(t, path, path+".1.gz")
		write(t, path, "three\n")
		f.settle()
		if got := f.book.texts(path); got[len(got)-1] != "three" {
			t.Errorf("got %q", got)
		}
		if len(f.book.gaps) != 1 {
			t.Errorf("gaps %q, want one", f.book.gaps)
		}
	})
}

func TestFollowAgain(t *testing.T) {
	// begin reads some lines and stops.
	begin := func(t *testing.T, cfg Config, content string) *stream.Position {
		write(t, cfg.Paths[0], content)
		f := startFollower(t, cfg, nil)
		f.settle()
		f.stop()
		return f.after()
	}
	bubble(t, "rotated and compressed meanwhile", func(t *testing.T, path string) {
		cfg := Config{Paths: []string{path}}
		at := begin(t, cfg, "one\n")
		appendTo(t, path, "two\n")
		compress(t, zstdForm, path, path+"-20260301.zst")
		write(t, path+"-20260302", "three\nend")
		write(t, path+"-errors.1", "of another log\n")
		write(t, path, "four\n")
		f := startFollower(t, cfg, at)
		defer f.stop()
		f.expect("two", "three", "end", "four")
		f.expectGaps()
	})
	bubble(t, "while a rotated file is being compressed", func(t *testing.T, path string) {
		cfg := Config{Paths: []string{path}}
		at := begin(t, cfg, "one\n")
		appendTo(t, path, "two\n")
		compress(t, gzipForm, path, path+".2.gz")
		write(t, path+".1", "three\n")
		write(t, path+".1.gz", string(pack(gzipForm, []byte("three\n"))[:12]))
		write(t, path, "four\n")
		f := startFollower(t, cfg, at)
		defer f.stop()
		f.expect("two", "three", "four")
		f.expectGaps()
	})
	bubble(t, "what is another partition is no rotated file", func(t *testing.T, path string) {
		other := path + ".1"
		write(t, other, "other\n")
		cfg := Config{Paths: []string{path, other}}
		at := begin(t, cfg, "one\n")
		rename(t, path, path+".2")
		write(t, other, "other\nanother\n")
		write(t, path, "two\n")
		f := startFollower(t, cfg, at)
		defer f.stop()
		f.expect("two")
		f.expectGaps()
	})
	bubble(t, "a log of dates whose link is read", func(t *testing.T, path string) {
		day := func(d int) string {
			return filepath.Join(filepath.Dir(path), fmt.Sprintf("quay-2026-03-%02d.jsonl", d))
		}
		link := func(d int) {
			os.Remove(path)
			if err := os.Symlink(day(d), path); err != nil {
				t.Fatal(err)
			}
		}
		link(1)
		cfg := Config{Paths: []string{path}}
		at := begin(t, cfg, "one\n")
		write(t, day(2), "two\n")
		write(t, day(3), "three\n")
		link(3)
		f := startFollower(t, cfg, at)
		defer f.stop()
		f.expect("two", "three")
		f.expectGaps()
	})
	bubble(t, "finite", func(t *testing.T, path string) {
		at := begin(t, Config{Paths: []string{path}}, "one\n")
		appendTo(t, path, "two")
		rename(t, path, path+".1")
		write(t, path, "three\nfour")
		n := readFinite(t, Config{Paths: []string{path}}, map[string]stream.Position{path: *at})
		if got := n.texts(path); !reflect.DeepEqual(got, []string{"two", "three", "four"}) || n.ended[path] != 1 || n.gaps != nil {
			t.Errorf("got %q, ended %d, gaps %q", got, n.ended[path], n.gaps)
		}
	})
	bubble(t, "older files are let be", func(t *testing.T, path string) {
		cfg := Config{Paths: []string{path}}
		write(t, path+".3", "older\n")
		compress(t, gzipForm, path+".3", path+".3.gz")
		write(t, path+".2", "old\n")
		at := begin(t, cfg, "one\n")
		rename(t, path, path+".1")
		write(t, path, "two\n")
		f := startFollower(t, cfg, at)
		defer f.stop()
		f.expect("two")
		f.expectGaps()
	})
	bubble(t, "moved under a name of its own, and copied", func(t *testing.T, path string) {
		cfg := Config{Paths: []string{path}}
		at := begin(t, cfg, "one\n")
		appendTo(t, path, "two\n")
		compress(t, gzipForm, path, filepath.Join(filepath.Dir(path), "put aside"))
		write(t, path, "three\n")
		f := startFollower(t, cfg, at)
		defer f.stop()
		f.expect("two", "three")
		f.expectGaps()
	})
	bubble(t, "gone", func(t *testing.T, path string) {
		cfg := Config{Paths: []string{path}}
		at := begin(t, cfg, "one\n")
		write(t, path, "two\n")
		f := startFollower(t, cfg, at)
		defer f.stop()
		f.expect("two")
		f.expectGaps("harbour.jsonl 4-4")
		if f.book.lines[path][0].Mark == at.Mark {
			t.Error("a new file has the old one's mark")
		}
	})
	bubble(t, "gone, and nothing is there", func(t *testing.T, path string) {
		cfg := Config{Paths: []string{path}}
		at := begin(t, cfg, "one\n")
		if err := os.RemoveAll(filepath.Dir(path)); err != nil {
			t.Fatal(err)
		}
		f := startFollower(t, cfg, at)
		defer f.stop()
		f.expect()
		f.expectGaps("harbour.jsonl 4-4")
		if err := os.Mkdir(filepath.Dir(path), 0o755); err != nil {
			t.Fatal(err)
		}
		write(t, path, "two\n")
		f.expect("two")
	})
	bubble(t, "the same first lines in many files", func(t *testing.T, path string) {
		cfg := Config{Paths: []string{path}, CSV: true}
		long := strings.Repeat("column,", 400) + "\n" // more than the head of a file
		at := begin(t, cfg, long+"one\n")
		rename(t, path, path+".2")
		write(t, path+".1", long+"two\n")
		write(t, path, long+"three\n")
		for _, r := range []string{path + ".2", path + ".1"} {
			compress(t, gzipForm, r, r+".gz")
		}
		f := startFollower(t, cfg, at)
		defer f.stop()
		f.expect("two", "three")
		f.expectGaps()
	})
	bubble(t, "a young file's mark grows with it", func(t *testing.T, path string) {
		f := startFollower(t, Config{Paths: []string{path}}, nil)
		var marks []string
		for range 30 {
			appendTo(t, path, strings.Repeat("x", 99)+"\n")
			f.settle()
			lines := f.book.lines[path]
			marks = append(marks, lines[len(lines)-1].Mark)
		}
		f.stop()
		for i, text := range marks {
			m, err := parseMark(text)
			if want := min(100*(i+1), headSize); err != nil || m.n != want {
				t.Errorf("after %d bytes the mark %q is of %d, want %d: %v", 100*(i+1), text, m.n, want, err)
			}
		}
	})
}
