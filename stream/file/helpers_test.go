package file

import (
	"bytes"
	"context"
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"

	"github.com/klauspost/compress/gzip"
	"github.com/klauspost/compress/zstd"
	"go.uber.org/goleak"

	"stillwell/stream"
)

func TestMain(m *testing.M) {
	flag.Parse()
	if seed := flag.Lookup("rapid.seed"); seed.Value.String() == "0" { // else the clock's
		if err := seed.Value.Set("20260301"); err != nil {
			panic(err)
		}
	}
	goleak.VerifyTestMain(m)
}

// A seen line is what a receiver got.
type seen struct {
	Text   string // without '\n'
	Offset int64
	Mark   string
	Header string
	End    int64 // of its chunk
}

// A notebook is a receiver that writes down what comes. It gives chunks back late
// and checks then that nobody has written over them.
type notebook struct {
	from map[string]stream.Position

	mu         sync.Mutex
	partitions []*stream.Partition
	lines      map[string][]seen
	ended      map[string]int
	caughtUp   map[string]int
	gaps       []string
	faults     []string
	held       []heldChunk
}

type heldChunk struct {
	chunk *stream.Chunk
	copy  []byte
}

func newNotebook() *notebook {
	return &notebook{from: map[string]stream.Position{}, lines: map[string][]seen{}, ended: map[string]int{}, caughtUp: map[string]int{}}
}

func (n *notebook) Open(name string) (*stream.Partition, stream.Position, bool, error) {
	n.mu.Lock()
	defer n.mu.Unlock()
	p := &stream.Partition{Name: name, Index: len(n.partitions)}
	n.partitions = append(n.partitions, p)
	from, ok := n.from[name]
	return p, from, ok, nil
}

func (n *notebook) Chunk(ctx context.Context, c *stream.Chunk) error {
	n.mu.Lock()
	defer n.mu.Unlock()
	name := c.Partition.Name
	rest, at := c.Data, c.Base
	if len(rest) == 0 {
		n.faults = append(n.faults, "a chunk is empty")
	}
	for len(rest) > 0 {
		line, after, found := bytes.Cut(rest, []byte{'\n'})
		if !found && !c.Final {
			n.faults = append(n.faults, fmt.Sprintf("a chunk at %d ends in a line: %q", c.Base, line))
		}
		n.lines[name] = append(n.lines[name], seen{string(line), at, c.Mark, string(c.Header), c.Base + int64(len(c.Data))})
		at += int64(len(rest) - len(after))
		rest = after
	}
	n.held = append(n.held, heldChunk{c, bytes.Clone(c.Data)})
	if len(n.held) > 3 {
		n.letGo(1)
	}
	return ctx.Err()
}

func (n *notebook) letGo(count int) {
	for _, h := range n.held[:count] {
		if !bytes.Equal(h.chunk.Data, h.copy) {
			n.faults = append(n.faults, "a chunk was written over before its release")
		}
		h.chunk.Release()
	}
	n.held = n.held[count:]
}

func (n *notebook) End(p *stream.Partition) {
	n.mu.Lock()
	defer n.mu.Unlock()
	n.ended[p.Name]++
}

func (n *notebook) CaughtUp(p *stream.Partition) {
	n.mu.Lock()
	defer n.mu.Unlock()
	n.caughtUp[p.Name]++
}

func (n *notebook) Gap(p *stream.Partition, from, to int64, why string) {
	n.mu.Lock()
	defer n.mu.Unlock()
	n.gaps = append(n.gaps, fmt.Sprintf("%s %d-%d", filepath.Base(p.Name), from, to))
}

func (n *notebook) texts(path string) []string {
	n.mu.Lock()
	defer n.mu.Unlock()
	var texts []string
	for _, l := range n.lines[path] {
		texts = append(texts, l.Text)
	}
	return texts
}

// close gives back what is held, and returns what was wrong.
func (n *notebook) close() []string {
	n.mu.Lock()
	defer n.mu.Unlock()
	n.letGo(len(n.held))
	return n.faults
}

type fataler interface {
	Helper()
	Fatalf(format string, args ...any)
}

// readFinite runs a source to its end.
func readFinite(t fataler, cfg Config, from map[string]stream.Position) *notebook {
	t.Helper()
	n := newNotebook()
	n.from = from
	s, err := New(cfg)
	if err != nil {
		t.Fatalf("new: %v", err)
	}
	if err := s.Run(context.Background(), n); err != nil {
		t.Fatalf("run: %v", err)
	}
	if faults := n.close(); faults != nil {
		t.Fatalf("%s", strings.Join(faults, "\n"))
	}
	return n
}

func pack(f form, content []byte) []byte {
	var out bytes.Buffer
	switch f {
	case gzipForm:
		half := len(content) / 2
		for _, part := range [][]byte{content[:half], content[half:]} { // two members
			z := gzip.NewWriter(&out)
			z.Write(part)
			z.Close()
		}
	case zstdForm:
		z, err := zstd.NewWriter(&out, zstd.WithEncoderConcurrency(1))
		if err != nil {
			panic(err)
		}
		z.Write(content)
		z.Close()
	default:
		return content
	}
	return out.Bytes()
}

func write(t fataler, path, content string) {
	t.Helper()
	if err := os.WriteFile(path, []byte(content), 0o644); err != nil {
		t.Fatalf("%v", err)
	}
}

// caught tells how often the source has said that nothing more lies there.
func (n *notebook) caught(path string) int {
	n.mu.Lock()
	defer n.mu.Unlock()
	return n.caughtUp[path]
}
