package kafka

import (
	"context"
	"errors"
	"time"

	kafkago "github.com/segmentio/kafka-go"
	"github.com/segmentio/kafka-go/protocol"
)

// fetchVersion is the first that can carry zstd (Kafka 2.1), and brokers of today still speak it.
const fetchVersion = 10

// fetched is the answer to a fetch of one partition.
type fetched struct {
	high       int64 // high watermark: the offset after the last replicated message
	stable     int64 // last stable offset: the first message of an undecided transaction, else high
	aborted    []aborted
	start, end int // the record batches are buf[start:end]
}

// An aborted transaction: what this producer wrote from first on, until its marker, does not count.
type aborted struct{ producer, first int64 }

var errGarbled = errors.New("the answer cannot be understood")

// wanted is what a fetch asks for.
type wanted struct {
	topic     string
	partition int32
	epoch     int32 // of its leader
	offset    int64
	wait      time.Duration // how long the broker may wait for something to come
	maxBytes  int
}

// fetch asks for messages of one partition. The answer is read into buf, which is made anew if it is too
// small, and aborted transactions into into[:0]. An error that the broker names is a kafkago.Error; the link
// is then still sound.
//
//	source  Kafka protocol guide, Fetch version 10 (without a fetch session)
func (l *link) fetch(ctx context.Context, w wanted, buf []byte, into []aborted) (fetched, []byte, error) {
	const none = -1
	buf, err := l.exchange(ctx, request{key: protocol.Fetch, version: fetchVersion, wait: w.wait, body: func(b []byte) []byte {
		b = appendInt32(b, none) // we are no replica
		b = appendInt32(b, int32(w.wait/time.Millisecond))
		b = appendInt32(b, 1) // least bytes
		b = appendInt32(b, int32(w.maxBytes))
		b = append(b, 1)         // read committed
		b = appendInt32(b, 0)    // session
		b = appendInt32(b, none) // its epoch
		b = appendInt32(b, 1)    // topics
		b = appendString(b, w.topic)
		b = appendInt32(b, 1) // partitions
		b = appendInt32(b, w.partition)
		b = appendInt32(b, w.epoch)
		b = appendInt64(b, w.offset)
		b = appendInt64(b, none) // log start, for replicas
		b = appendInt32(b, int32(w.maxBytes))
		return appendInt32(b, 0) // forgotten topics
	}}, buf)
	if err != nil {
		return fetched{}, buf, err
	}
	f, err := parseFetch(buf, w, into)
	return f, buf, err
}

func parseFetch(buf []byte, w wanted, into []aborted) (fetched, error) {
	c := cursor{b: buf}
	c.int32() // throttled for so many milliseconds
	code := c.int16()
	c.int32() // session
	if code != 0 {
		return fetched{}, kafkago.Error(code)
	}
	topics, name := c.length(1), c.string()
	parts, id := c.length(1), c.int32()
	if topics != 1 || name != w.topic || parts != 1 || id != w.partition {
		return fetched{}, errGarbled
	}
	code = c.int16()
	f := fetched{high: c.int64(), stable: c.int64(), aborted: into[:0]}
	c.int64() // log start
	for range c.length(16) {
		f.aborted = append(f.aborted, aborted{producer: c.int64(), first: c.int64()})
	}
	size := max(int(c.int32()), 0)
	f.start = c.i
	f.end = f.start + size
	c.take(size)
	switch {
	case c.short:
		return fetched{}, errGarbled
	case code != 0:
		return fetched{}, kafkago.Error(code)
	}
	return f, nil
}
