// Package stream is how events come in. Its parts are rooms of their own:
//
//	kafka, file   sources: bytes in order, partition by partition
//	decode        bytes to an event's fields
//	order         verdicts, canonical order, duplicates, watermarks, steps
//	checkpoint    positions and state, kept as one atomic unit
//
// This package itself holds what a source and its reader say to each other.
package stream

import "context"

// A Chunk is a run of consecutive raw events of one partition. A file's chunk is
// whole lines in Data and no Messages; a broker's chunk has one message an event, and where
// it has none, but Messages is not nil, it says that reading goes on at Base.
// The reader that receives a chunk owns it until it calls Release.
type Chunk struct {
	Partition *Partition
	Data      []byte
	Base      int64     // lines: position (byte offset) of Data[0]
	Mark      string    // identity of what positions count in; see Position
	Header    []byte    // lines of CSV: the file's first line, which is not in Data; else nil
	Messages  []Message // messages: each a part of Data
	Final     bool      // lines: the last line may lack its newline and still counts
	Release   func()    // returns the buffers to the source; never nil
}

// A Message is one event of a broker.
type Message struct {
	Offset     int64 // position in the partition
	Start, End int   // the value is Data[Start:End]
	Stamp      int64 // the broker's or producer's timestamp, Unix nanoseconds; 0 if none
}

// A Partition is one ordered log of events.
type Partition struct {
	Name  string // stable across restarts: "harbour.events/3", or a file's path
	Index int    // dense, in order of opening
	gate  gate
}

// A Position says where to read on in a partition. Offset counts bytes in a file
// and messages on a broker; Mark is the source's own (a file's identity), opaque to others.
type Position struct {
	Offset int64
	Mark   string
}

// A Source reads partitions until they end, or until ctx does. Run returns only when
// every goroutine it started has ended; nil at the end of a finite source and when ctx is done.
type Source interface {
	Run(ctx context.Context, to Receiver) error
}

// A Receiver takes what a source reads. Calls for one partition come from one
// goroutine at a time; calls for different partitions may come together.
type Receiver interface {
	// Open announces a partition, before its first chunk, and says where to read on:
	// ok is false if nothing is known of it, and the source then begins where its settings say.
	Open(name string) (p *Partition, from Position, ok bool, err error)
	// Chunk hands over events; it blocks while the reader is busy, and fails only when ctx is done.
	Chunk(ctx context.Context, c *Chunk) error
	// End: a finite partition is exhausted.
	End(p *Partition)
	// CaughtUp: the source has just confirmed that nothing more lies in p at present.
	CaughtUp(p *Partition)
	// Gap: events between two positions of p are known to be missing.
	Gap(p *Partition, from, to int64, why string)
}
