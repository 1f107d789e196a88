package file

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"stillwell/stream"
)

// linesOf is the plainest way to say which lines content has, and where.
func linesOf(content []byte, csv bool, maxLine int) (lines []seen) {
	at := int64(0)
	header := ""
	first := true
	for len(content) > 0 {
		line, rest, _ := bytes.Cut(content, []byte{'\n'})
		if first && csv {
			header = strings.TrimRight(string(line), "\r")
		} else {
			lines = append(lines, seen{Text: string(clip(line, maxLine)), Offset: at, Header: header})
		}
		first = false
		at += int64(len(content) - len(rest))
		content = rest
	}
	return lines
}

// clip shortens what is too long, for how much of it is kept may depend on the chunk.
func clip(line []byte, maxLine int) []byte { return line[:min(len(line), maxLine+lineSlack)] }

// same compares lines, leaving out what depends on chunks.
func same(got, want []seen, maxLine int) error {
	for i := range max(len(got), len(want)) {
		if i >= len(got) {
			return fmt.Errorf("line %d of %d is missing: %+v", i, len(want), want[i])
		}
		if i >= len(want) {
			return fmt.Errorf("%d lines too many, the first %+v", len(got)-i, got[i])
		}
		g := seen{Text: string(clip([]byte(got[i].Text), maxLine)), Offset: got[i].Offset, Header: got[i].Header}
		if w := (seen{Text: want[i].Text, Offset: want[i].Offset, Header: want[i].Header}); g != w {
			return fmt.Errorf("line %d is %+v, want %+v", i, g, w)
		}
	}
	return nil
}

func genContent(t *rapid.T) []byte {
	line := rapid.OneOf(
		rapid.StringMatching(`[a-z{}",:0-9]{0,12}`),
		rapid.StringMatching(`[a-z]{0,3}\r`),
		rapid.StringMatching(`[x-z]{20,90}`),
		rapid.Just(""),
	)
	content := strings.Join(rapid.SliceOfN(line, 0, 40).Draw(t, "lines"), "\n")
	if rapid.Bool().Draw(t, "newline at the end") {
		content += "\n"
	}
	return []byte(content)
}

var genForm = rapid.SampledFrom([]form{plain, gzipForm, zstdForm})

// Whatever the form, the size of chunks and the longest line: all lines come, once,
// where they stand; and from every position that a reader may keep, the rest comes.
func TestEveryLineFromEveryPosition(t *testing.T) {
	path := filepath.Join(t.TempDir(), "harbour.jsonl")
	rapid.Check(t, func(t *rapid.T) {
		content := genContent(t)
		cfg := Config{
			Paths:     []string{path},
			CSV:       rapid.Bool().Draw(t, "csv"),
			MaxLine:   rapid.IntRange(1, 100).Draw(t, "longest"),
			ChunkSize: rapid.IntRange(1, 200).Draw(t, "chunk"),
		}
		write(t, path, string(pack(genForm.Draw(t, "form"), content)))
		want := linesOf(content, cfg.CSV, cfg.MaxLine)
		n := readFinite(t, cfg, nil)
		got := n.lines[path]
		if cfg.CSV && len(want) > 0 && len(want[0].Header) > cfg.MaxLine {
			for i := range want { // a header that is too long is cut off, and which line is wrong with it does not matter
				want[i].Header = got[0].Header
			}
		}
		if err := same(got, want, cfg.MaxLine); err != nil {
			t.Fatalf("%v", err)
		}
		if n.ended[path] != 1 || n.gaps != nil {
			t.Fatalf("ended %d times, gaps %v", n.ended[path], n.gaps)
		}
		if len(got) == 0 {
			return
		}

		i := rapid.IntRange(0, len(got)-1).Draw(t, "resume at line")
		at, rest := got[i].Offset, want[i:]
		if rapid.Bool().Draw(t, "at the end of its chunk") {
			at, rest = got[i].End, want[len(want):]
			for k, l := range want {
				if l.Offset >= at {
					rest = want[k:]
					break
				}
			}
		}
		// The file may have been packed otherwise meanwhile.
		write(t, path, string(pack(genForm.Draw(t, "form later"), content)))
		cfg.ChunkSize = rapid.IntRange(1, 200).Draw(t, "chunk later")
		n = readFinite(t, cfg, map[string]stream.Position{path: {Offset: at, Mark: got[i].Mark}})
		if err := same(n.lines[path], rest, cfg.MaxLine); err != nil {
			t.Fatalf("from %d: %v", at, err)
		}
		if n.gaps != nil {
			t.Fatalf("gaps %v", n.gaps)
		}
	})
}

func TestSeveralFilesTogether(t *testing.T) {
	dir := t.TempDir()
	var cfg Config
	want := map[string][]string{}
	for i, f := range []form{plain, gzipForm, zstdForm, plain} {
		path := filepath.Join(dir, fmt.Sprintf("pier-%d", i))
		var content strings.Builder
		for k := range 1000 * i {
			line := fmt.Sprintf(`{"pier":%d,"passenger":"p-%05d"}`, i, k)
			want[path] = append(want[path], line)
			fmt.Fprintln(&content, line)
		}
		write(t, path, string(pack(f, []byte(content.String()))))
		cfg.Paths = append(cfg.Paths, path)
	}
	cfg.ChunkSize = 1000
	n := readFinite(t, cfg, nil)
	for i, path := range cfg.Paths {
		if !reflect.DeepEqual(n.texts(path), want[path]) {
			t.Errorf("%s: %d lines, want %d, the same", path, len(n.lines[path]), len(want[path]))
		}
		if n.ended[path] != 1 {
			t.Errorf("%s ended %d times", path, n.ended[path])
		}
		if p := n.partitions[i]; p.Name != path {
			t.Errorf("partition %d is %s, want %s", i, p.Name, path)
		}
	}
}

func TestFileThatHasGrown(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tickets.jsonl")
	write(t, path, "one\ntwo")
	n := readFinite(t, Config{Paths: []string{path}}, nil)
	last := n.lines[path][1]
	position := map[string]stream.Position{path: {Offset: last.End, Mark: last.Mark}}
	if again := readFinite(t, Config{Paths: []string{path}}, position); again.lines[path] != nil || again.ended[path] != 1 || again.gaps != nil {
		t.Errorf("unchanged, it gives %+v, gaps %v", again.lines[path], again.gaps)
	}
	// What was counted as a line at the file's end stays one.
	write(t, path, "one\ntwo and more\nthree\n")
	if got := readFinite(t, Config{Paths: []string{path}}, position).texts(path); !reflect.DeepEqual(got, []string{"three"}) {
		t.Errorf("grown, it gives %q, want three", got)
	}
}

func TestByteOrderMark(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tickets.jsonl")
	for _, f := range []form{plain, gzipForm} {
		write(t, path, string(pack(f, []byte("\ufeffone\ntwo\n"))))
		n := readFinite(t, Config{Paths: []string{path}}, nil)
		if got := n.lines[path]; len(got) != 2 || got[0].Text != "one" || got[0].Offset != 3 || got[1].Offset != 7 {
			t.Errorf("%s: %+v", f, got)
		}
		from := stream.Position{Offset: 3, Mark: n.lines[path][0].Mark}
		if got := readFinite(t, Config{Paths: []string{path}}, map[string]stream.Position{path: from}).texts(path); len(got) != 2 {
			t.Errorf("%s: from the first line %q", f, got)
		}
	}
}

func TestShrunkenFiniteFile(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tickets.jsonl")
	write(t, path, "one\ntwo\nthree\n")
	n := readFinite(t, Config{Paths: []string{path}}, nil)
	last := n.lines[path][2]
	write(t, path, "one\ntwo\n")
	n = readFinite(t, Config{Paths: []string{path}}, map[string]stream.Position{path: {Offset: last.Offset + 6, Mark: last.Mark}})
	if got := n.texts(path); !reflect.DeepEqual(got, []string{"one", "two"}) {
		t.Errorf("got %q, want all that is there", got)
	}
	if want := []string{"tickets.jsonl 14-14"}; !reflect.DeepEqual(n.gaps, want) {
		t.Errorf("gaps %q, want %q", n.gaps, want)
	}
}

func TestHeaderTooLong(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tickets.csv")
	write(t, path, strings.Repeat("column,", 3000)+"\none\ntwo\n")
	cfg := Config{Paths: []string{path}, CSV: true, MaxLine: 100}
	n := readFinite(t, cfg, nil)
	got := n.lines[path]
	if len(got) != 2 || got[0].Text != "one" || got[0].Offset != 21001 || len(got[0].Header) != 102 {
		t.Fatalf("%+v", got)
	}
	n = readFinite(t, cfg, map[string]stream.Position{path: {Offset: got[1].Offset, Mark: got[1].Mark}})
	if got := n.texts(path); !reflect.DeepEqual(got, []string{"two"}) {
		t.Errorf("from the second line %q", got)
	}
}

// A shortener cuts the file that is read when its first chunk comes.
type shortener struct {
	*notebook
	path string
	done bool
}

func (s *shortener) Chunk(ctx context.Context, c *stream.Chunk) error {
	if !s.done {
		s.done = true
		if err := os.Truncate(s.path, 6); err != nil {
			return err
		}
	}
	return s.notebook.Chunk(ctx, c)
}

func TestFileCutWhileRead(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tickets.jsonl")
	write(t, path, "one\ntwo\nthree\n")
	s, err := New(Config{Paths: []string{path}, ChunkSize: 5})
	if err != nil {
		t.Fatal(err)
	}
	n := &shortener{notebook: newNotebook(), path: path}
	if err := s.Run(t.Context(), n); err != nil {
		t.Fatal(err)
	}
	if got := n.texts(path); !reflect.DeepEqual(got, []string{"one", "tw"}) || n.ended[path] != 1 {
		t.Errorf("got %q, ended %d", got, n.ended[path])
	}
	if want := []string{"tickets.jsonl 6-14"}; !reflect.DeepEqual(n.gaps, want) {
		t.Errorf("gaps %q, want %q", n.gaps, want)
	}
}

// A stubborn receiver refuses chunks, which ends the source.
type stubborn struct{ *notebook }

func (stubborn) Chunk(context.Context, *stream.Chunk) error { return errors.New("no room") }

func TestReceiverThatFails(t *testing.T) {
	r, w := io.Pipe()
	defer w.Close()
	path := filepath.Join(t.TempDir(), "tickets.jsonl")
	write(t, path, "one\n")
	s, err := New(Config{Paths: []string{path}, Stdin: r}) // from the pipe nothing ever comes
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Run(t.Context(), stubborn{newNotebook()}); err == nil || err.Error() != "no room" {
		t.Errorf("error %v", err)
	}
	r, w = io.Pipe()
	go w.Write(pack(gzipForm, []byte("one\n"))[:20]) // and here no end
	if s, err = New(Config{Stdin: r}); err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(t.Context(), 20*time.Millisecond)
	defer cancel()
	if err := s.Run(ctx, stubborn{newNotebook()}); err != nil {
		t.Errorf("error %v, want none when the context is done", err)
	}
}

func TestProgress(t *testing.T) {
	dir := t.TempDir()
	one, two := filepath.Join(dir, "one"), filepath.Join(dir, "two")
	packed := pack(gzipForm, []byte(strings.Repeat("a ticket\n", 10000)))
	write(t, one, string(packed))
	write(t, two, "line\n")
	s, err := New(Config{Paths: []string{one, two}})
	if err != nil {
		t.Fatal(err)
	}
	if _, total := s.Progress(); total != -1 {
		t.Errorf("before running, total %d, want -1", total)
	}
	if err := s.Run(t.Context(), newNotebook()); err != nil {
		t.Fatal(err)
	}
	if done, total := s.Progress(); done != total || total != int64(len(packed)+5) {
		t.Errorf("done %d of %d, want %d", done, total, len(packed)+5)
	}

	s, err = New(Config{Stdin: strings.NewReader("line\n")})
	if err != nil {
		t.Fatal(err)
	}
	if err := s.Run(t.Context(), newNotebook()); err != nil {
		t.Fatal(err)
	}
	if done, total := s.Progress(); done != 5 || total != -1 {
		t.Errorf("standard input: done %d of %d, want 5 of -1", done, total)
	}
}

func TestDamagedFile(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tickets.gz")
	for _, f := range []form{gzipForm, zstdForm} {
		whole := pack(f, bytes.Repeat([]byte("a ticket, and another one\n"), 40000))
		for what, content := range map[string][]byte{
			"cut short": whole[:len(whole)*3/4],
			"header":    whole[:5],
			"changed":   append(append(bytes.Clone(whole[:len(whole)/2]), 0xff, 0xff, 0xff, 0xff, 0, 0, 0, 0), whole[len(whole)/2+8:]...),
		} {
			write(t, path, string(content))
			s, err := New(Config{Paths: []string{path}})
			if err != nil {
				t.Fatal(err)
			}
			n := newNotebook()
			err = s.Run(t.Context(), n)
			if err == nil || !strings.Contains(err.Error(), path) || !strings.Contains(err.Error(), "damaged or cut short") || n.ended[path] != 0 {
				t.Errorf("%s, %s: error %v, ended %d", f, what, err, n.ended[path])
			}
			for _, l := range n.lines[path] {
				if f == gzipForm && what == "cut short" && l.Text != "a ticket, and another one" {
					t.Errorf("%s, %s: half a line %q", f, what, l.Text)
				}
			}
		}
	}
}

func TestUnusualFiles(t *testing.T) {
	dir := t.TempDir()
	path := filepath.Join(dir, "tickets.jsonl")
	write(t, path, "")
	if n := readFinite(t, Config{Paths: []string{path}}, nil); n.ended[path] != 1 || n.lines[path] != nil {
		t.Errorf("empty: %+v", n)
	}
	locked := filepath.Join(dir, "locked")
	write(t, locked, "x")
	if err := os.Chmod(locked, 0); err != nil {
		t.Fatal(err)
	}
	missing := filepath.Join(dir, "none.jsonl")
	for _, test := range []struct {
		cfg  Config
		want []string
	}{
		{Config{Paths: []string{dir}}, []string{dir + " is a folder", "*.jsonl"}},
		{Config{Paths: []string{missing, dir}}, []string{missing, "no such file", "check the path", "is a folder"}},
		{Config{Paths: []string{dir}, Follow: true}, []string{"is a folder"}},
		{Config{Paths: []string{os.DevNull}, Follow: true}, []string{"cannot be followed"}},
		{Config{Paths: []string{locked}}, []string{locked, "permission denied", "the right to read"}},
	} {
		if test.cfg.Paths[0] == locked && os.Getuid() == 0 {
			continue // root may read everything
		}
		s, err := New(test.cfg)
		if err != nil {
			t.Fatal(err)
		}
		n := newNotebook()
		err = s.Run(t.Context(), n)
		for _, want := range test.want {
			if err == nil || !strings.Contains(err.Error(), want) {
				t.Errorf("%v: error %v, want it to contain %q", test.cfg.Paths, err, want)
			}
		}
		if len(n.partitions) > 0 {
			t.Errorf("%v: a partition was opened before the fault was told", test.cfg.Paths)
		}
	}
}

func TestMarkOfAnotherKind(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tickets.jsonl")
	write(t, path, "one\n")
	s, err := New(Config{Paths: []string{path}})
	if err != nil {
		t.Fatal(err)
	}
	n := newNotebook()
	n.from[path] = stream.Position{Offset: 4, Mark: "epoch-7"}
	if err := s.Run(t.Context(), n); err == nil || !strings.Contains(err.Error(), "epoch-7") || !strings.Contains(err.Error(), path) {
		t.Errorf("error %v, want it to name the mark and the file", err)
	}
}

func TestNewRefuses(t *testing.T) {
	for want, cfg := range map[string]Config{
		"nothing to read": {},
		"empty":           {Paths: []string{""}},
		"one file":        {Paths: []string{"a.jsonl", "./a.jsonl"}},
		"standard input":  {Paths: []string{"-"}},
		"below 0":         {Paths: []string{"a"}, MaxLine: -1},
	} {
		if _, err := New(cfg); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%+v: error %v, want it to contain %q", cfg, err, want)
		}
	}
}

func TestExpand(t *testing.T) {
	dir := t.TempDir()
	for _, name := range []string{"b.jsonl", "a.jsonl", "c.csv", "d[1].csv"} {
		write(t, filepath.Join(dir, name), "")
	}
	in := func(names ...string) (paths []string) {
		for _, name := range names {
			paths = append(paths, filepath.Join(dir, name))
		}
		return paths
	}
	got, err := Expand(append(in("b.jsonl", "*.jsonl", "d[1].csv", "none.csv"), "-"))
	want := append(in("b.jsonl", "a.jsonl", "d[1].csv", "none.csv"), "-")
	if err != nil || !reflect.DeepEqual(got, want) {
		t.Errorf("got %q, %v, want %q", got, err, want)
	}
	for _, bad := range []string{"*.txt", "[a"} {
		if _, err := Expand(in(bad)); err == nil {
			t.Errorf("%s: no error", bad)
		}
	}
}

func FuzzParseMark(f *testing.F) {
	f.Add(mark{1, 2, 3, [16]byte{4}}.String())
	f.Add("1:0:0:0:")
	f.Add("1:1:1:1:00112233445566778899aabbccddeeff00")
	f.Add("2:1:1:1:00112233445566778899aabbccddeeff")
	f.Fuzz(func(t *testing.T, text string) {
		if m, err := parseMark(text); err == nil && m.String() != text {
			t.Errorf("%q reads as %q", text, m)
		}
	})
}

// Whatever is in a file, reading it ends; and what is not packed comes as it is.
func FuzzContent(f *testing.F) {
	for _, text := range []string{"", "one\ntwo", "\ufeffone\n", "\x00\xff\n\r\n"} {
		for _, form := range []form{plain, gzipForm, zstdForm} {
			f.Add(pack(form, []byte(text)), 10, 7, true)
		}
	}
	path := filepath.Join(f.TempDir(), "tickets")
	f.Fuzz(func(t *testing.T, content []byte, maxLine, chunk int, csv bool) {
		cfg := Config{Paths: []string{path}, MaxLine: 1 + maxLine&0xfff, ChunkSize: 1 + chunk&0xfff, CSV: csv}
		write(t, path, string(content))
		s, err := New(cfg)
		if err != nil {
			t.Fatal(err)
		}
		n := newNotebook()
		err = s.Run(t.Context(), n)
		if faults := n.close(); faults != nil {
			t.Fatal(faults)
		}
		if form, _ := sniff(content); form != plain {
			return
		}
		if err != nil || n.ended[path] != 1 {
			t.Fatalf("error %v, ended %d", err, n.ended[path])
		}
		if header, _, _ := bytes.Cut(content, []byte{'\n'}); csv && len(header) > cfg.MaxLine || !csv && bytes.HasPrefix(content, byteOrderMark) {
			return
		}
		if err := same(n.lines[path], linesOf(content, csv, cfg.MaxLine), cfg.MaxLine); err != nil {
			t.Fatal(err)
		}
	})
}

func TestSniff(t *testing.T) {
	for _, test := range []struct {
		in   string
		form form
		sure bool
	}{
		{"", plain, false},
		{"{", plain, true},
		{"(", plain, false},
		{"(\xb5", plain, false},
		{"(a", plain, true},
		{"\x1f\x8b", plain, false},
		{"\x1f\x8b\x08\x00", gzipForm, true},
		{"\x28\xb5\x2f\xfd", zstdForm, true},
		{"\x5f\x2a\x4d\x18", zstdForm, true},
		{"[1,2", plain, true},
	} {
		if f, sure := sniff([]byte(test.in)); f != test.form || sure != test.sure {
			t.Errorf("%q is %s, %v, want %s, %v", test.in, f, sure, test.form, test.sure)
		}
	}
}
