package file

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"
)

// line is a step of one reading.
func line(n int) Lines { return Lines{Readings: fmt.Appendf(nil, "{\"reading\":%d}\n", n)} }

func lines(from, to int) (text string) {
	for n := from; n < to; n++ {
		text += string(line(n).Readings)
	}
	return text
}

func mustOpen(t *testing.T, cfg Config, from *Place) *Sink {
	t.Helper()
	s, err := Open(cfg, from)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func emit(t *testing.T, s *Sink, from, to int) {
	t.Helper()
	for n := from; n < to; n++ {
		if err := s.Emit(line(n)); err != nil {
			t.Fatal(err)
		}
	}
}

func save(t *testing.T, s *Sink) *Place {
	t.Helper()
	p := s.Place()
	if err := errors.Join(s.Sync(), s.Durable(p)); err != nil {
		t.Fatal(err)
	}
	return &p
}

func mustClose(t *testing.T, s *Sink) {
	t.Helper()
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
}

// want compares the whole folder.
func want(t *testing.T, dir string, files map[string]string) {
	t.Helper()
	found, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, e := range found {
		names = append(names, e.Name())
		b, err := os.ReadFile(filepath.Join(dir, e.Name()))
		if err != nil {
			t.Fatal(err)
		}
		text, ok := files[e.Name()]
		if !ok {
			t.Errorf("%s should not be there; it holds %.100q", e.Name(), b)
		} else if string(b) != text {
			t.Errorf("%s holds %q, want %q", e.Name(), b, text)
		}
	}
	for name := range files {
		if !slices.Contains(names, name) {
			t.Errorf("%s is not there; there are %v", name, names)
		}
	}
}

func put(t *testing.T, dir, name, text string) {
	t.Helper()
	if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
}

// TestTornLine: what a crash has torn is mended, also before the first checkpoint.
func TestTornLine(t *testing.T) {
	dir := memory(t)
	cfg := Config{Readings: filepath.Join(dir, "readings.jsonl")}
	for cut := range lines(0, 3) {
		put(t, dir, "readings.jsonl", lines(0, 3)[:cut])
		s := mustOpen(t, cfg, nil)
		emit(t, s, 0, 4)
		mustClose(t, s)
		want(t, dir, map[string]string{"readings.jsonl": lines(0, 4), "alarms.jsonl": ""})
	}
}

// TestUndo: what was put aside after the place comes back, and again.
func TestUndo(t *testing.T) {
	dir := memory(t)
	cfg := Config{Readings: filepath.Join(dir, "readings.jsonl"), MaxBytes: 28}
	s := mustOpen(t, cfg, nil)
	emit(t, s, 0, 1)
	at := save(t, s)
	for range 3 {
		emit(t, s, 1, 9)
		mustClose(t, s)
		want(t, dir, map[string]string{"readings-1.jsonl": lines(0, 2), "readings-2.jsonl": lines(2, 4), "readings-3.jsonl": lines(4, 6),
			"readings-4.jsonl": lines(6, 8), "readings.jsonl": lines(8, 9), "alarms.jsonl": ""})
		s = mustOpen(t, cfg, at)
	}
	emit(t, s, 1, 3) // and fewer than before
	mustClose(t, s)
	want(t, dir, map[string]string{"readings-1.jsonl": lines(0, 2), "readings.jsonl": lines(2, 3), "alarms.jsonl": ""})
}

// TestKeep: the youngest stay, and what a checkpoint goes on writing.
func TestKeep(t *testing.T) {
	dir := memory(t)
	cfg := Config{Readings: filepath.Join(dir, "readings.jsonl"), MaxBytes: 1, Keep: 2}
	s := mustOpen(t, cfg, nil)
	emit(t, s, 0, 9)
	if _, err := os.Stat(filepath.Join(dir, "readings-1.jsonl")); err != nil {
		t.Errorf("removed before any checkpoint can do without it: %v", err)
	}
	before := save(t, s)
	if _, err := os.Stat(filepath.Join(dir, "readings-1.jsonl")); err != nil {
		t.Errorf("removed while the checkpoint before, of nothing, can be restored: %v", err)
	}
	emit(t, s, 9, 15)
	save(t, s)
	for n := range 15 {
		_, err := os.Stat(filepath.Join(dir, fmt.Sprintf("readings-%d.jsonl", n+1)))
		if gone := errors.Is(err, os.ErrNotExist); gone != (n < 9) {
			t.Errorf("readings-%d.jsonl: gone %v; the checkpoint at 9 can be restored", n+1, gone)
		}
	}
	mustClose(t, s)
	s = mustOpen(t, cfg, before)
	emit(t, s, 9, 15)
	save(t, s)
	save(t, s)
	mustClose(t, s)
	want(t, dir, map[string]string{"readings-14.jsonl": lines(13, 14), "readings-15.jsonl": lines(14, 15), "readings.jsonl": "", "alarms.jsonl": ""})
}

// TestOthersFiles: files that are not ours keep their contents.
func TestOthersFiles(t *testing.T) {
	dir := memory(t)
	put(t, dir, "readings.jsonl", lines(0, 2)+"mine\n")
	put(t, dir, "alarms.jsonl", "my alarms\n")
	put(t, dir, "readings-2.jsonl", "my second\n")
	put(t, dir, "readings-2025.jsonl", "last year\n")
	put(t, dir, "readings-old.jsonl", "old\n")
	s := mustOpen(t, Config{Readings: filepath.Join(dir, "readings.jsonl")}, nil)
	emit(t, s, 0, 4)
	mustClose(t, s)
	want(t, dir, map[string]string{"readings.jsonl": lines(0, 4), "readings-before-1.jsonl": lines(0, 2) + "mine\n", "alarms.jsonl": "my alarms\n",
		"readings-2.jsonl": "my second\n", "readings-2025.jsonl": "last year\n", "readings-old.jsonl": "old\n"})

	s = mustOpen(t, Config{Readings: filepath.Join(dir, "readings.jsonl"), MaxBytes: 28}, nil)
	emit(t, s, 7, 10)
	mustClose(t, s)
	want(t, dir, map[string]string{"readings-1.jsonl": lines(7, 9), "readings.jsonl": lines(9, 10), "readings-before-2.jsonl": lines(0, 4),
		"readings-before-1.jsonl": lines(0, 2) + "mine\n", "alarms.jsonl": "my alarms\n",
		"readings-before-3.jsonl": "my second\n", "readings-before-4.jsonl": "last year\n", "readings-old.jsonl": "old\n"})
}

// TestReplace: nothing of an earlier replay stays, however short this one is.
func TestReplace(t *testing.T) {
	for n := range 3 {
		dir := memory(t)
		put(t, dir, "readings.jsonl", lines(0, 2)+"of old\n")
		put(t, dir, "readings-1.jsonl", "a copy\n")
		put(t, dir, "alarms.jsonl", "old alarm\n")
		s := mustOpen(t, Config{Readings: filepath.Join(dir, "readings.jsonl"), Replace: true}, nil)
		emit(t, s, 0, n)
		if err := s.End(); err != nil {
			t.Fatal(err)
		}
		mustClose(t, s)
		want(t, dir, map[string]string{"readings.jsonl": lines(0, n), "readings-1.jsonl": "a copy\n", "alarms.jsonl": ""})
	}
}

// TestOtherPath: the lines go on where they are asked for.
func TestOtherPath(t *testing.T) {
	dir, other := memory(t), memory(t)
	s := mustOpen(t, Config{Readings: filepath.Join(dir, "readings.jsonl")}, nil)
	emit(t, s, 0, 3)
	at := save(t, s)
	emit(t, s, 3, 4)
	mustClose(t, s)

	s = mustOpen(t, Config{Readings: filepath.Join(other, "elsewhere.jsonl")}, at)
	emit(t, s, 3, 5)
	mustClose(t, s)
	want(t, other, map[string]string{"elsewhere.jsonl": lines(3, 5), "alarms.jsonl": ""})
	want(t, dir, map[string]string{"readings.jsonl": lines(0, 4), "alarms.jsonl": ""})

	if err := os.Rename(filepath.Join(dir, "readings.jsonl"), filepath.Join(other, "moved.jsonl")); err != nil {
		t.Fatal(err)
	}
	s = mustOpen(t, Config{Readings: filepath.Join(other, "moved.jsonl")}, at)
	emit(t, s, 3, 6)
	mustClose(t, s)
	want(t, other, map[string]string{"moved.jsonl": lines(0, 6), "elsewhere.jsonl": lines(3, 5), "alarms.jsonl": ""})
}

// TestRefused: what cannot be right is told at the start, with the way out.
func TestRefused(t *testing.T) {
	dir := memory(t)
	path := filepath.Join(dir, "readings.jsonl")
	s := mustOpen(t, Config{Readings: path}, nil)
	emit(t, s, 0, 30)
	at := save(t, s)
	mustClose(t, s)
	if err := os.Mkdir(filepath.Join(dir, "folder"), 0o755); err != nil {
		t.Fatal(err)
	}
	for _, tt := range []struct {
		name string
		cfg  Config
		make func() error
		want []string
	}{
		{"no folder", Config{Readings: filepath.Join(dir, "no", "r.jsonl")}, nil, []string{"no does not exist", "make it"}},
		{"a file as folder", Config{Readings: filepath.Join(path, "r.jsonl")}, nil, []string{"readings.jsonl is not a folder", "name another path"}},
		{"a folder", Config{Readings: filepath.Join(dir, "folder")}, nil, []string{"folder is a folder, want a file"}},
		{"alarms in a folder that is none", Config{Readings: path, Alarms: filepath.Join(dir, "no", "a.jsonl")}, nil, []string{"no does not exist"}},
		{"one file for both", Config{Readings: path, Alarms: dir + "/folder/../readings.jsonl"}, nil, []string{"cannot share"}},
		{"a device", Config{Readings: os.DevNull, Alarms: filepath.Join(dir, "a.jsonl")}, nil, []string{"pipe or device", "name a file"}},
		{"a cut file", Config{Readings: path}, func() error { return os.Truncate(path, at.Readings.Size-1) }, []string{"where the checkpoint remembers", "name another path"}},
		{"a file written over", Config{Readings: path}, func() error {
			return os.WriteFile(path, []byte(lines(100, 200)), 0o644)
		}, []string{"not the file that the checkpoint goes on writing", "name another path"}},
		{"no file", Config{Readings: path}, func() error { return os.Remove(path) }, []string{"is gone", "put it back"}},
	} {
		if tt.make != nil {
			if err := tt.make(); err != nil {
				t.Fatal(err)
			}
		}
		_, err := Open(tt.cfg, at)
		for _, part := range tt.want {
			if err == nil || !strings.Contains(err.Error(), part) {
				t.Errorf("%s: %v, want %q", tt.name, err, part)
			}
		}
	}
}

// TestNotWritable stands for missing rights too, which root does not lack.
func TestNotWritable(t *testing.T) {
	dir := mount(t, readOnly, "64k")
	_, err := Open(Config{Readings: filepath.Join(dir, "readings.jsonl")}, nil)
	if err == nil || !strings.Contains(err.Error(), "right to write") || !strings.Contains(err.Error(), dir) {
		t.Errorf("%v, want the place and the remedy", err)
	}
}

// TestFullDisk: a step goes into the file whole or not at all, and can be written when there is
// room again.
func TestFullDisk(t *testing.T) {
	dir := mount(t, 0, "64k")
	s := mustOpen(t, Config{Readings: filepath.Join(dir, "readings.jsonl")}, nil)
	step := Lines{Readings: []byte(strings.Repeat("x", 9_999) + "\n")}
	n := 0
	var err error
	for ; err == nil && n < 20; n++ {
		err = s.Emit(step)
	}
	if err == nil || n < 3 {
		t.Fatalf("after %d steps: %v, want a full disk", n, err)
	}
	whole := strings.Repeat(string(step.Readings), n-1)
	b, err := os.ReadFile(filepath.Join(dir, "readings.jsonl"))
	if err != nil || string(b) != whole {
		t.Errorf("the full disk holds %d bytes (%v), want %d whole steps, %d", len(b), err, n-1, len(whole))
	}
	if at := s.Place().Readings.Size; at != int64(len(whole)) {
		t.Errorf("the place is %d, want %d", at, len(whole))
	}
	enlarge(t, dir, "128k")
	if err := s.Emit(step); err != nil {
		t.Error(err)
	}
	mustClose(t, s)
	want(t, dir, map[string]string{"readings.jsonl": whole + string(step.Readings), "alarms.jsonl": ""})
}

// TestBeside: Sync and Durable run beside the stream.
func TestBeside(t *testing.T) {
	dir := memory(t)
	s := mustOpen(t, Config{Readings: filepath.Join(dir, "readings.jsonl"), MaxBytes: 100, Keep: 1}, nil)
	places := make(chan Place, 1)
	var keeper sync.WaitGroup
	keeper.Go(func() {
		for p := range places {
			if err := errors.Join(s.Sync(), s.Durable(p)); err != nil {
				t.Error(err)
			}
		}
	})
	for n := range 2000 {
		emit(t, s, n, n+1)
		select {
		case places <- s.Place():
		default:
		}
	}
	close(places)
	keeper.Wait()
	save(t, s)
	save(t, s)
	mustClose(t, s)
	found, err := os.ReadDir(dir)
	if err != nil || len(found) != 3 {
		t.Errorf("%v, %v: want the youngest put aside, the present file and that of alarms", found, err)
	}
}
