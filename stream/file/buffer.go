package file

import (
	"sync"

	"stillwell/stream"
)

// A buffer is the memory of one chunk, and the chunk itself.
type buffer struct {
	mem   []byte
	chunk stream.Chunk
}

// buffers hands out buffers and takes them back, so that reading allocates
// nothing once enough of them are about. A sync.Pool would lose them at each collection.
type buffers struct {
	front int // where in a buffer content is read to; before it is room for the start of its first line
	size  int // of each
	keep  int // at most so many idle ones

	mu   sync.Mutex
	idle []*buffer
}

func (p *buffers) get() *buffer {
	p.mu.Lock()
	defer p.mu.Unlock()
	if n := len(p.idle); n > 0 {
		b := p.idle[n-1]
		p.idle = p.idle[:n-1]
		return b
	}
	b := &buffer{mem: make([]byte, p.size)}
	release := func() { p.release(b) }
	b.chunk.Release = release
	return b
}

// put takes back a buffer that was not handed over.
func (p *buffers) put(b *buffer) {
	p.mu.Lock()
	defer p.mu.Unlock()
	if len(p.idle) < p.keep {
		p.idle = append(p.idle, b)
	}
}

// release takes back a buffer that was. Its chunk has a partition exactly as long
// as its receiver owns it.
func (p *buffers) release(b *buffer) {
	if b.chunk.Partition == nil {
		panic("file: a chunk was released twice")
	}
	b.chunk = stream.Chunk{Release: b.chunk.Release}
	p.put(b)
}
