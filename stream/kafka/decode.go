package kafka

import (
	"bytes"
	"cmp"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"io"
	"math"
	"slices"

	"github.com/segmentio/kafka-go/compress"

	"stillwell/stream"
)

// A decoder turns the record batches of an answer into messages, in order of offset and each offset once,
// whatever the bytes are. Values are not copied: a message points into data, to the end of which compressed
// batches are unpacked.
//
// The library's own Batch is not used for this: as of v0.4.51 it hands out the markers of transactions and the
// messages of aborted ones like any other, even when asked for committed ones only, dates messages by the
// producer's clock where the topic goes by the broker's, and takes four times as long.
//
//	source  Kafka documentation, "Message format": record batch (magic 2); message set (magic 0 and 1) in legacy.go
type decoder struct {
	data     []byte
	messages []stream.Message
	next     int64     // the lowest offset still wanted
	aborted  []aborted // in order of first offset; those whose start has been passed are cut off
	cursed   []int64   // producers inside an aborted transaction
	src      bytes.Reader
	most     int // bytes that one batch may unpack to; 0: maxUnpacked
}

// damage is a record batch that cannot be read. What lies before it has been decoded.
type damage struct {
	last int64 // the batch's last offset, as far as its header can be believed
	err  error
}

func (d *damage) Error() string { return d.err.Error() }
func (d *damage) Unwrap() error { return d.err }

var (
	errChecksum = errors.New("its checksum is wrong")
	errRecord   = errors.New("a record in it is malformed")
	errLength   = errors.New("its length is impossible")
	castagnoli  = crc32.MakeTable(crc32.Castagnoli)
)

// Layout of a record batch. Offsets within it, in bytes.
const (
	atLength     = 8  // of what follows the length itself
	atMagic      = 16 // common to all formats
	atCRC        = 17
	atAttributes = 21
	atLastDelta  = 23
	atBaseStamp  = 27
	atMaxStamp   = 35
	atProducer   = 43
	atCount      = 57
	atRecords    = 61

	prefix = 12 // base offset and length

	codecBits       = 0x07
	appendTimeBit   = 0x08
	transactionBit  = 0x10
	controlBatchBit = 0x20
)

// begin resets the decoder to the answer in data, from which messages from offset next on are wanted.
func (d *decoder) begin(data []byte, next int64, gone []aborted) {
	d.data, d.messages, d.next, d.aborted, d.cursed = data, d.messages[:0], next, gone, d.cursed[:0]
	slices.SortFunc(d.aborted, func(a, b aborted) int { return cmp.Compare(a.first, b.first) })
}

// batches decodes data[i:end]. A batch that was cut off at the end, as brokers do to keep to a size, is left
// for the next fetch. An error is a *damage.
func (d *decoder) batches(i, end int) error {
	for i+atMagic < end {
		base := d.int64(i)
		size := d.int32(i + atLength)
		magic := d.data[i+atMagic]
		switch {
		case size < atMagic-prefix+1:
			return &damage{last: base, err: errLength}
		case size > end-i-prefix:
			return nil
		}
		stop := i + prefix + size
		var last int64
		var err error
		switch magic {
		case 2:
			last, err = d.batch(base, i, stop)
		case 0, 1:
			last, err = base, d.legacy(base, i, stop)
		default:
			last, err = base, fmt.Errorf("format %d is not known", magic)
		}
		if err != nil {
			return &damage{last: last, err: err}
		}
		d.next = max(d.next, last+1)
		i = stop
	}
	return nil
}

// batch decodes the batch at data[i:stop] and returns its last offset.
func (d *decoder) batch(base int64, i, stop int) (last int64, err error) {
	if stop-i < atRecords {
		return base, errLength
	}
	last = base + int64(max(d.int32(i+atLastDelta), 0))
	if crc32.Checksum(d.data[i+atAttributes:stop], castagnoli) != uint32(d.int32(i+atCRC)) {
		return last, errChecksum
	}
	attributes := int(binary.BigEndian.Uint16(d.data[i+atAttributes:]))
	if skip := d.skip(attributes, d.int64(i+atProducer), last, i, stop); skip || last < d.next {
		return last, nil
	}
	count := d.int32(i + atCount)
	stamps := stamps{base: d.int64(i + atBaseStamp)}
	if attributes&appendTimeBit != 0 {
		stamps.fixed, stamps.base = true, d.int64(i+atMaxStamp)
	}
	at := i + atRecords
	if codec := attributes & codecBits; codec != 0 {
		if at, stop, err = d.unpack(codec, at, stop); err != nil {
			return last, err
		}
	}
	return last, d.records(base, stamps, count, at, stop)
}

// skip keeps account of transactions, and says whether a batch is one that nobody should see: a marker, or
// part of a transaction that came to nothing.
//
//	source  Kafka Improvement Proposal 98, "Discarding aborted transactional messages"
func (d *decoder) skip(attributes int, producer, last int64, i, stop int) bool {
	for len(d.aborted) > 0 && d.aborted[0].first <= last {
		d.cursed = append(d.cursed, d.aborted[0].producer)
		d.aborted = d.aborted[1:]
	}
	if attributes&controlBatchBit != 0 {
		if d.aborts(i+atRecords, stop) {
			if k := slices.Index(d.cursed, producer); k >= 0 {
				d.cursed = slices.Delete(d.cursed, k, k+1)
			}
		}
		return true
	}
	return attributes&transactionBit != 0 && slices.Contains(d.cursed, producer)
}

// aborts tells whether a control batch, whose record is data[i:stop], ends a transaction by aborting it.
// The record's key is a version and a type, 0 for abort.
func (d *decoder) aborts(i, stop int) bool {
	b := d.data[:stop]
	_, i = varint(b, i) // length
	if i < 0 {
		return false
	}
	i++ // attributes
	for range 2 {
		if _, i = varint(b, i); i < 0 { // timestamp, offset
			return false
		}
	}
	n, i := varint(b, i)
	return i >= 0 && n >= 4 && stop-i >= 4 && binary.BigEndian.Uint16(b[i+2:]) == 0
}

// stamps is how a batch dates its records: each by its distance from base, or all of them fixed at base. In
// milliseconds.
type stamps struct {
	base  int64
	fixed bool
}

// of is the timestamp of a record, in nanoseconds; 0 if it has none. What is too far in the future stays so.
func (s stamps) of(delta int64) int64 {
	if s.fixed {
		delta = 0
	}
	const most = math.MaxInt64 / 1_000_000
	switch ms := s.base + delta; {
	case ms < 0:
		return 0
	case ms > most:
		return math.MaxInt64
	default:
		return ms * 1_000_000
	}
}

// records decodes count records at data[i:stop]. It runs once for every event: no copy, no allocation.
func (d *decoder) records(base int64, stamps stamps, count, i, stop int) error {
	b := d.data[:stop]
	for range count {
		size, at := varint(b, i)
		if at < 0 || size < 1 || size > int64(stop-at) {
			return errRecord
		}
		i = at + int(size) // where the next record begins: headers need no reading
		stamp, at := varint(b[:i], at+1)
		if at < 0 {
			return errRecord
		}
		delta, at := varint(b[:i], at)
		if at < 0 {
			return errRecord
		}
		key, at := varint(b[:i], at)
		if at < 0 || key > int64(i-at) {
			return errRecord
		}
		value, at := varint(b[:i], at+int(max(key, 0)))
		if at < 0 || value > int64(i-at) {
			return errRecord
		}
		d.add(base+delta, at, at+int(max(value, 0)), stamps.of(stamp)) // a null value is an empty one
	}
	return nil
}

// add takes a message unless it lies before what is wanted: a batch is sent whole, even if its first messages
// were not asked for.
func (d *decoder) add(offset int64, start, end int, stamp int64) {
	if offset >= d.next {
		d.messages = append(d.messages, stream.Message{Offset: offset, Start: start, End: end, Stamp: stamp})
		d.next = offset + 1
	}
}

// maxUnpacked bounds what one batch may unpack to, so that a few kilobytes cannot fill the memory.
const maxUnpacked = 256 << 20

var errUnpacked = errors.New("it unpacks to more than can be right")

// unpack appends to data what data[i:stop] holds compressed, and returns where it lies.
func (d *decoder) unpack(codec, i, stop int) (start, end int, err error) {
	c := compress.Compression(codec).Codec()
	if c == nil {
		return 0, 0, fmt.Errorf("compression %d is not known", codec)
	}
	d.src.Reset(d.data[i:stop])
	r := c.NewReader(&d.src)
	defer r.Close()
	most := cmp.Or(d.most, maxUnpacked)
	start = len(d.data)
	out := slices.Grow(d.data, 4*(stop-i))
	for {
		if len(out) == cap(out) {
			out = slices.Grow(out, len(out)-start+512)
		}
		n, err := r.Read(out[len(out):cap(out)])
		out = out[:len(out)+n]
		switch {
		case errors.Is(err, io.EOF):
			d.data = out
			return start, len(out), nil
		case err != nil:
			return 0, 0, fmt.Errorf("%v: %w", compress.Compression(codec), err)
		case len(out)-start > most:
			return 0, 0, errUnpacked
		}
	}
}

func (d *decoder) int64(i int) int64 { return int64(binary.BigEndian.Uint64(d.data[i:])) }
func (d *decoder) int32(i int) int   { return int(int32(binary.BigEndian.Uint32(d.data[i:]))) }
