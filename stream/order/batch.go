package order

import (
	"hash/maphash"

	"stillwell/stream"
)

// A Batch is a run of consecutive events of one partition, decoded: what the
// sequencer needs of each, and the payload that it only carries.
type Batch struct {
	Partition *stream.Partition
	Start     stream.Position // of the first event
	Next      stream.Position // after the last
	Recycle   func(*Batch)    // called when nothing of the batch is needed any more; may be nil

	events []event
	arena  []byte
	mark   *mark
}

// A mark remembers where a batch began while anything of it may have to be read again.
type mark struct {
	start   stream.Position
	before  int64 // largest time of the partition before the first event
	newest  int64 // largest time in the batch that may be remembered with an id
	pending int   // events not yet settled; the adding itself counts as one
}

// event is one event of a batch. Its id and payload lie in the batch's arena.
type event struct {
	at        int64 // event time; for what has none, nothing
	stamp     int64 // the broker's time of it, 0 if there is none
	position  int64
	max       int64 // largest time of the partition when it came
	id        [2]uint64
	idAt      uint32
	payloadAt uint32
	end       uint32
	broken    bool // malformed
}

// Reset empties the batch for reuse.
func (b *Batch) Reset() {
	*b = Batch{Recycle: b.Recycle, events: b.events[:0], arena: b.arena[:0]}
}

// Len is the number of events.
func (b *Batch) Len() int { return len(b.events) }

// Malformed appends an event that could not be read.
func (b *Batch) Malformed(position int64) {
	b.events = append(b.events, event{position: position, broken: true})
}

// Two seeds make 128 bits, so that distinct ids are not taken for one another. They
// differ between processes, which does not matter: the table of ids is never stored.
var idSeeds = [2]maphash.Seed{maphash.MakeSeed(), maphash.MakeSeed()}

// Event appends an event, with its id (nil if the stream has none). The payload
// is appended by the caller to Arena's result and committed by Keep.
func (b *Batch) Event(at, stamp, position int64, id []byte) {
	e := event{at: at, stamp: stamp, position: position, idAt: uint32(len(b.arena))}
	if len(id) > 0 {
		e.id = [2]uint64{maphash.Bytes(idSeeds[0], id), maphash.Bytes(idSeeds[1], id) | 1}
		b.arena = append(b.arena, id...)
	}
	e.payloadAt, e.end = uint32(len(b.arena)), uint32(len(b.arena))
	b.events = append(b.events, e)
}

// Arena is where the last event's payload may be appended; Keep takes the result.
func (b *Batch) Arena() []byte { return b.arena }

// Keep makes what was appended to Arena the payload of the last event.
func (b *Batch) Keep(arena []byte) {
	b.arena = arena
	b.events[len(b.events)-1].end = uint32(len(arena))
}

func (b *Batch) idOf(e *event) []byte      { return b.arena[e.idAt:e.payloadAt] }
func (b *Batch) payloadOf(e *event) []byte { return b.arena[e.payloadAt:e.end] }

// Retract takes the last event back, which turned out not to be one.
func (b *Batch) Retract() {
	last := len(b.events) - 1
	b.arena = b.arena[:b.events[last].idAt]
	b.events = b.events[:last]
}
