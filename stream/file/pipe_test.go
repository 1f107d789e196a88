//go:build unix

package file

import (
	"context"
	"io"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/klauspost/compress/gzip"

	"stillwell/stream"
)

// runStdin starts a source on in; lines come out by the returned function, which
// waits for so many.
func runStdin(t *testing.T, cfg Config, from *stream.Position) (n *notebook, wait func(lines int), stop func() error) {
	t.Helper()
	n = newNotebook()
	name := StdinName
	if len(cfg.Paths) > 0 {
		name = cfg.Paths[0]
	}
	if from != nil {
		n.from[name] = *from
	}
	s, err := New(cfg)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	result := make(chan error, 1)
	go func() { result <- s.Run(ctx, n) }()
	wait = func(lines int) {
		t.Helper()
		for start := time.Now(); len(n.texts(name)) < lines; time.Sleep(time.Millisecond) {
			if time.Since(start) > 5*time.Second {
				t.Fatalf("after 5 s %q, want %d lines", n.texts(name), lines)
			}
		}
	}
	stop = func() error {
		cancel()
		select {
		case err := <-result:
			return err
		case <-time.After(5 * time.Second):
			t.Fatal("a source does not end with its context")
			return nil
		}
	}
	return n, wait, stop
}

// Lines come as soon as they are written, packed or not, and reading can be called
// off while nothing comes.
func TestStdinAsItComes(t *testing.T) {
	for what, pipe := range map[string]func() (io.Reader, io.WriteCloser){
		"pipe of the system": func() (io.Reader, io.WriteCloser) {
			r, w, err := os.Pipe()
			if err != nil {
				t.Fatal(err)
			}
			t.Cleanup(func() { r.Close() })
			return r, w
		},
		"pipe in the program": func() (io.Reader, io.WriteCloser) { return io.Pipe() },
	} {
		t.Run(what, func(t *testing.T) {
			r, w := pipe()
			n, wait, stop := runStdin(t, Config{Stdin: r}, nil)
			for i, text := range []string{"1\n", "(\ntw", "o\n", "three\n"} {
				if _, err := io.WriteString(w, text); err != nil {
					t.Fatal(err)
				}
				wait([]int{1, 2, 3, 4}[i])
			}
			if err := stop(); err != nil {
				t.Errorf("error %v", err)
			}
			if got := n.texts(StdinName); !reflect.DeepEqual(got, []string{"1", "(", "two", "three"}) {
				t.Errorf("got %q", got)
			}
			w.Close()
		})
	}
}

func TestPackedStdinAsItComes(t *testing.T) {
	r, w := io.Pipe()
	defer w.Close()
	_, wait, stop := runStdin(t, Config{Stdin: r}, nil)
	z := gzip.NewWriter(w)
	for i := range 3 {
		io.WriteString(z, "a ticket\n")
		if err := z.Flush(); err != nil {
			t.Fatal(err)
		}
		wait(i + 1)
	}
	if err := stop(); err != nil {
		t.Errorf("error %v", err)
	}
}

func TestStdinPacked(t *testing.T) {
	content := strings.Repeat("a ticket\n", 30000) + "the last"
	for _, f := range []form{plain, gzipForm, zstdForm} {
		n := readFinite(t, Config{Stdin: strings.NewReader(string(pack(f, []byte(content))))}, nil)
		got := n.lines[StdinName]
		if len(got) != 30001 || got[30000].Text != "the last" || got[30000].Offset != 270000 || n.ended[StdinName] != 1 {
			t.Errorf("%s: %d lines, ended %d", f, len(got), n.ended[StdinName])
		}
		// The same once more, from a position.
		from := map[string]stream.Position{StdinName: {Offset: got[29999].Offset, Mark: got[0].Mark}}
		n = readFinite(t, Config{Stdin: strings.NewReader(string(pack(f, []byte(content))))}, from)
		if texts := n.texts(StdinName); !reflect.DeepEqual(texts, []string{"a ticket", "the last"}) {
			t.Errorf("%s: resumed, %d lines", f, len(texts))
		}
		from[StdinName] = stream.Position{Offset: got[29999].Offset + 2, Mark: got[0].Mark} // in a line
		n = readFinite(t, Config{Stdin: strings.NewReader(string(pack(f, []byte(content))))}, from)
		if texts := n.texts(StdinName); !reflect.DeepEqual(texts, []string{"the last"}) {
			t.Errorf("%s: resumed in a line, %d lines", f, len(texts))
		}
		// Another stream is read from its start.
		n = readFinite(t, Config{Stdin: strings.NewReader("other\n")}, from)
		if texts := n.texts(StdinName); !reflect.DeepEqual(texts, []string{"other"}) || n.gaps != nil {
			t.Errorf("%s: another stream gives %q, gaps %q", f, texts, n.gaps)
		}
	}
	if s, err := New(Config{Stdin: strings.NewReader(string(pack(gzipForm, []byte(content))[:500]))}); err != nil {
		t.Error(err)
	} else if err := s.Run(t.Context(), newNotebook()); err == nil {
		t.Error("a damaged stream gives no error")
	}
}

func TestNamedPipe(t *testing.T) {
	path := filepath.Join(t.TempDir(), "pipe")
	if err := syscall.Mkfifo(path, 0o600); err != nil {
		t.Fatal(err)
	}
	_, _, stop := runStdin(t, Config{Paths: []string{path}}, nil)
	time.Sleep(20 * time.Millisecond)
	if err := stop(); err != nil { // no writer ever came
		t.Errorf("error %v", err)
	}
	n, wait, stop := runStdin(t, Config{Paths: []string{path}}, nil)
	w, err := os.OpenFile(path, os.O_WRONLY, 0)
	if err != nil {
		t.Fatal(err)
	}
	io.WriteString(w, "one\ntwo")
	wait(1)
	w.Close()
	wait(2)
	if err := stop(); err != nil || n.ended[path] != 1 {
		t.Errorf("error %v, ended %d", err, n.ended[path])
	}
}
