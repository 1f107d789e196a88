package file

import "io"

const (
	aheadBlocks = 2
	aheadSize   = 256 << 10
)

// An ahead reads its source in a goroutine, up to aheadBlocks blocks before its reader.
type ahead struct {
	full   chan block
	empty  chan []byte
	halt   chan struct{}
	ended  chan struct{}
	now    block // what the reader is at
	rest   []byte
	source io.Reader
	eager  bool // pass on what a read gives, and do not fill blocks
}

type block struct {
	mem []byte
	n   int
	err error // after the n bytes
}

func readAhead(source io.Reader, eager bool) *ahead {
	a := &ahead{
		full:   make(chan block, aheadBlocks),
		empty:  make(chan []byte, aheadBlocks),
		halt:   make(chan struct{}),
		ended:  make(chan struct{}),
		source: source,
		eager:  eager,
	}
	for range aheadBlocks {
		a.empty <- make([]byte, aheadSize)
	}
	go a.run()
	return a
}

func (a *ahead) run() {
	defer close(a.ended)
	for {
		select {
		case mem := <-a.empty:
			b := a.fill(mem)
			a.full <- b // has room for all blocks
			if b.err != nil {
				return
			}
		case <-a.halt:
			return
		}
	}
}

func (a *ahead) fill(mem []byte) block {
	b := block{mem: mem}
	for b.n < len(mem) && b.err == nil {
		var n int
		n, b.err = a.source.Read(mem[b.n:])
		b.n += n
		if a.eager && b.n > 0 {
			break
		}
	}
	return b
}

func (a *ahead) Read(p []byte) (int, error) {
	for len(a.rest) == 0 {
		if a.now.err != nil {
			return 0, a.now.err
		}
		if a.now.mem != nil {
			a.empty <- a.now.mem
		}
		a.now = <-a.full
		a.rest = a.now.mem[:a.now.n]
	}
	n := copy(p, a.rest)
	a.rest = a.rest[n:]
	return n, nil
}

// stop ends the goroutine and waits for it. A read under way must end by itself.
func (a *ahead) stop() {
	close(a.halt)
	<-a.ended
}
