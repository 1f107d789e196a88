//go:build unix

package file

import (
	"bufio"
	"bytes"
	"context"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"syscall"
	"testing"
	"time"

	"stillwell/stream"
)

// A sink counts lines, as a reader must at least, and gives chunks back at once.
type sink struct {
	lines  int
	chunks int
	p      stream.Partition
}

func (s *sink) Open(name string) (*stream.Partition, stream.Position, bool, error) {
	s.p.Name = name
	return &s.p, stream.Position{}, false, nil
}

func (s *sink) Chunk(_ context.Context, c *stream.Chunk) error {
	for rest := c.Data; len(rest) > 0; s.lines++ {
		rest = rest[bytes.IndexByte(rest, '\n')+1:]
	}
	s.chunks++
	c.Release()
	return nil
}

func (s *sink) End(*stream.Partition)                       {}
func (s *sink) CaughtUp(*stream.Partition)                  {}
func (s *sink) Gap(*stream.Partition, int64, int64, string) {}

// benchFile writes a file of events, about size bytes, and returns how many bytes and lines.
func benchFile(t testing.TB, f form, size int) (path string, bytes int64, lines int) {
	path = filepath.Join(t.TempDir(), "tickets.jsonl")
	var content []byte
	for len(content) < size {
		content = fmt.Appendf(content, `{"ts":"2026-03-01T%02d:%02d:%02dZ","type":"ticket","passenger":"p-%07d","amount":%d.50,"platform":"web"}`+"\n",
			lines/3600%24, lines/60%60, lines%60, lines*7919%1000003, lines%97)
		lines++
	}
	if err := os.WriteFile(path, pack(f, content), 0o644); err != nil {
		t.Fatal(err)
	}
	return path, int64(len(content)), lines
}

const benchSize = 256 << 20

// throughput reports MB of content a second, by the clock and by the processor's
// time, which others on the machine disturb less.
func throughput(b *testing.B, size int64) (stop func()) {
	used := func() time.Duration {
		var u syscall.Rusage
		if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
			b.Fatal(err)
		}
		return time.Duration(u.Utime.Nano() + u.Stime.Nano())
	}
	b.SetBytes(size)
	b.ReportAllocs()
	start := used()
	return func() {
		b.ReportMetric(float64(size)*float64(b.N)/1e6/(used()-start).Seconds(), "cpuMB/s")
	}
}

func benchSource(b *testing.B, cfg Config, size int64, lines int) {
	defer throughput(b, size)()
	for b.Loop() {
		s, err := New(cfg)
		if err != nil {
			b.Fatal(err)
		}
		var out sink
		if err := s.Run(context.Background(), &out); err != nil || out.lines != lines {
			b.Fatalf("%d lines, want %d: %v", out.lines, lines, err)
		}
	}
}

// How fast does a plain file come from the page cache, in MB of content a second, and which size
// of chunk is best?
// go test ./stream/file -run '^$' -bench Plain -count 5
func BenchmarkPlain(b *testing.B) {
	path, size, lines := benchFile(b, plain, benchSize)
	for _, chunk := range []int{64 << 10, 128 << 10, 256 << 10, 512 << 10, 1 << 20} {
		b.Run(fmt.Sprintf("reader=source/chunk=%dK", chunk>>10), func(b *testing.B) {
			benchSource(b, Config{Paths: []string{path}, ChunkSize: chunk}, size, lines)
		})
	}
	b.Run("reader=loop/chunk=256K", func(b *testing.B) { // the least one can do: read, and find the newlines
		buf := make([]byte, 256<<10)
		defer throughput(b, size)()
		for b.Loop() {
			f, err := os.Open(path)
			if err != nil {
				b.Fatal(err)
			}
			n := 0
			for {
				k, err := f.Read(buf)
				for rest := buf[:k]; ; n++ {
					i := bytes.IndexByte(rest, '\n')
					if i < 0 {
						break
					}
					rest = rest[i+1:]
				}
				if err == io.EOF {
					break
				}
			}
			f.Close()
			if n != lines {
				b.Fatalf("%d lines, want %d", n, lines)
			}
		}
	})
	b.Run("reader=scanner", func(b *testing.B) {
		defer throughput(b, size)()
		for b.Loop() {
			f, err := os.Open(path)
			if err != nil {
				b.Fatal(err)
			}
			n := 0
			s := bufio.NewScanner(f)
			s.Buffer(make([]byte, 256<<10), 1<<20)
			for s.Scan() {
				n++
			}
			f.Close()
			if n != lines {
				b.Fatalf("%d lines, want %d", n, lines)
			}
		}
	})
}

// How fast do packed files come, in MB of content a second?
func BenchmarkPacked(b *testing.B) {
	for _, f := range []form{gzipForm, zstdForm} {
		path, size, lines := benchFile(b, f, 64<<20)
		b.Run("form="+string(f), func(b *testing.B) {
			benchSource(b, Config{Paths: []string{path}}, size, lines)
		})
	}
}

// Reading ten times as much allocates nothing more.
func TestNoAllocationPerChunk(t *testing.T) {
	allocs := func(size int) (per float64, chunks int) {
		path, _, _ := benchFile(t, plain, size)
		var out sink
		per = testing.AllocsPerRun(3, func() {
			out = sink{}
			s, err := New(Config{Paths: []string{path}, ChunkSize: 4 << 10})
			if err != nil {
				t.Fatal(err)
			}
			if err := s.Run(context.Background(), &out); err != nil {
				t.Fatal(err)
			}
		})
		return per, out.chunks
	}
	little, few := allocs(100 << 10)
	much, many := allocs(1000 << 10)
	if many < 200 || much-little > float64(many-few)/100 {
		t.Errorf("%g allocations for %d chunks, %g for %d", little, few, much, many)
	}
}
