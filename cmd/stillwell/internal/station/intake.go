package station

import (
	"context"
	"fmt"
	"sync"

	"stillwell/stream"
	"stillwell/stream/order"
)

// intake is the receiver of a source: it hands chunks to decoding workers and keeps their
// order, so that the engine sees the batches of a partition in the order in which they came.
type intake struct {
	jobs    chan *job // to the workers
	ordered chan *job // to the engine, in order of arrival
	batches chan *order.Batch

	mu    sync.Mutex
	names map[string]int
	known map[string]order.State // from a checkpoint
}

// A job is one thing that a source said.
type job struct {
	kind  jobKind
	part  *stream.Partition
	chunk *stream.Chunk
	batch *order.Batch
	ready chan struct{} // closed when the batch is decoded
	gap   [2]int64
	why   string
}

type jobKind uint8

const (
	jobChunk jobKind = iota
	jobOpen
	jobEnd
	jobCaughtUp
	jobGap
)

// depth is how many chunks may lie between source and engine.
const depth = 16

func newIntake(known []order.State) *intake {
	in := &intake{jobs: make(chan *job, depth), ordered: make(chan *job, depth), batches: make(chan *order.Batch, 4*depth),
		names: map[string]int{}, known: map[string]order.State{}}
	for _, st := range known {
		in.known[st.Name] = st
	}
	return in
}

// Open implements stream.Receiver.
func (in *intake) Open(name string) (*stream.Partition, stream.Position, bool, error) {
	in.mu.Lock()
	defer in.mu.Unlock()
	if _, twice := in.names[name]; twice {
		return nil, stream.Position{}, false, fmt.Errorf("partition %s is read twice", name)
	}
	p := &stream.Partition{Name: name, Index: len(in.names)}
	in.names[name] = p.Index
	in.ordered <- &job{kind: jobOpen, part: p}
	st := in.known[name]
	return p, st.At, st.At != stream.Position{}, nil // the zero position: nothing of it was read
}

// Chunk implements stream.Receiver.
func (in *intake) Chunk(ctx context.Context, c *stream.Chunk) error {
	j := &job{kind: jobChunk, part: c.Partition, chunk: c, batch: in.batch(), ready: make(chan struct{})}
	for _, to := range []chan *job{in.jobs, in.ordered} {
		select {
		case to <- j:
		case <-ctx.Done():
			return ctx.Err()
		}
	}
	return nil
}

// End implements stream.Receiver.
func (in *intake) End(p *stream.Partition) { in.ordered <- &job{kind: jobEnd, part: p} }

// CaughtUp implements stream.Receiver.
func (in *intake) CaughtUp(p *stream.Partition) { in.ordered <- &job{kind: jobCaughtUp, part: p} }

// Gap implements stream.Receiver.
func (in *intake) Gap(p *stream.Partition, from, to int64, why string) {
	in.ordered <- &job{kind: jobGap, part: p, gap: [2]int64{from, to}, why: why}
}

func (in *intake) batch() *order.Batch {
	select {
	case b := <-in.batches:
		return b
	default:
		return &order.Batch{Recycle: in.recycle}
	}
}

func (in *intake) recycle(b *order.Batch) {
	b.Reset()
	select {
	case in.batches <- b:
	default:
	}
}

// decode is a worker: it decodes chunks until there are no more.
func (in *intake) decode(r *reader) {
	for j := range in.jobs {
		r.read(j.chunk, j.batch)
		j.chunk.Release()
		close(j.ready)
	}
}
