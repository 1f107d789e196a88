package kafka

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"slices"

	"github.com/segmentio/kafka-go/compress"
	"github.com/twmb/franz-go/pkg/kmsg"
)

// A testBatch is a record batch as franz-go's kmsg encodes it.
type testBatch struct {
	base       int64
	holes      []int64 // offsets from base of the records; nil: one after the other
	values     [][]byte
	lastDelta  int // at least; the batch reaches further if its records do
	stamp      int64
	maxStamp   int64
	attributes int16
	producer   int64
}

func (tb testBatch) append(to []byte) []byte {
	var records []byte
	last := tb.lastDelta
	for i, v := range tb.values {
		delta := int64(i)
		if tb.holes != nil {
			delta = tb.holes[i]
		}
		last = max(last, int(delta))
		rec := kmsg.Record{OffsetDelta: int32(delta), TimestampDelta64: int64(i), Value: v}
		if i%3 == 1 {
			rec.Key = fmt.Appendf(nil, "key %d", i)
			rec.Headers = []kmsg.Header{{Key: "trace", Value: []byte("some text")}}
		}
		body := rec.AppendTo(nil)[1:] // without the length, which is 0 here: one byte
		rec.Length = int32(len(body))
		records = rec.AppendTo(records)
	}
	if codec := tb.attributes & codecBits; codec != 0 {
		records = pack(compress.Compression(codec), records)
	}
	b := kmsg.RecordBatch{
		FirstOffset: tb.base, PartitionLeaderEpoch: -1, Magic: 2, Attributes: tb.attributes, LastOffsetDelta: int32(last),
		FirstTimestamp: tb.stamp, MaxTimestamp: tb.maxStamp, ProducerID: tb.producer, ProducerEpoch: 0, FirstSequence: -1,
		NumRecords: int32(len(tb.values)), Records: records,
	}
	from := len(to)
	to = b.AppendTo(to)
	binary.BigEndian.PutUint32(to[from+atLength:], uint32(len(to)-from-prefix))
	seal(to[from:])
	return to
}

// marker is the control batch that ends a transaction.
func marker(to []byte, base, producer int64, commit bool) []byte {
	key := []byte{0, 0, 0, 0} // version, type
	if commit {
		key[3] = 1
	}
	rec := kmsg.Record{Key: key, Value: []byte{0, 0, 0, 0, 0, 0}}
	rec.Length = int32(len(rec.AppendTo(nil)) - 1)
	b := kmsg.RecordBatch{FirstOffset: base, Magic: 2, Attributes: transactionBit | controlBatchBit, ProducerID: producer, NumRecords: 1, Records: rec.AppendTo(nil)}
	from := len(to)
	to = b.AppendTo(to)
	binary.BigEndian.PutUint32(to[from+atLength:], uint32(len(to)-from-prefix))
	seal(to[from:])
	return to
}

// seal writes the checksum of a batch.
func seal(b []byte) {
	binary.BigEndian.PutUint32(b[atCRC:], crc32.Checksum(b[atAttributes:], castagnoli))
}

func pack(codec compress.Compression, b []byte) []byte {
	var out bytes.Buffer
	w := codec.Codec().NewWriter(&out)
	_, err := w.Write(b)
	if err = errors.Join(err, w.Close()); err != nil {
		panic(err)
	}
	return out.Bytes()
}

type decoded struct {
	offset int64
	value  string
	stamp  int64
}

func decode(data []byte, next int64, gone ...aborted) (out []decoded, d *decoder, err error) {
	d = &decoder{}
	d.begin(slices.Clone(data), next, gone)
	err = d.batches(0, len(data))
	for _, m := range d.messages {
		out = append(out, decoded{m.Offset, string(d.data[m.Start:m.End]), m.Stamp})
	}
	return out, d, err
}

var codecs = []int16{0, 1, 2, 3, 4} // none, gzip, snappy, lz4, zstd

// offsets puts a set in its place in the log, as a broker does.
func offsets(set []byte, version int8, packed bool, base int64, n int) {
	switch {
	case version == 2:
		binary.BigEndian.PutUint64(set, uint64(base))
	case packed: // the wrapper has the offset of the last message in it
		binary.BigEndian.PutUint64(set, uint64(base+int64(n)-1))
	default:
		for i := int64(0); len(set) > 0; i++ {
			binary.BigEndian.PutUint64(set, uint64(base+i))
			set = set[prefix+int(binary.BigEndian.Uint32(set[atLength:])):]
		}
	}
}

// frame writes the length of a batch.
func frame(b []byte) []byte {
	binary.BigEndian.PutUint32(b[atLength:], uint32(max(len(b)-prefix, 0)))
	return b
}

// oldMessageBytes writes a message by the layout of the formats 0 and 1.
func oldMessageBytes(magic, attributes byte, offset, stamp int64, value string) []byte {
	body := []byte{magic, attributes}
	if magic == 1 {
		body = appendInt64(body, stamp)
	}
	body = appendInt32(body, -1) // no key
	body = append(appendInt32(body, int32(len(value))), value...)
	b := appendInt32(appendInt64(nil, offset), int32(len(body)+4))
	return append(appendInt32(b, int32(crc32.ChecksumIEEE(body))), body...)
}
