package kafka

import (
	"encoding/binary"
	"errors"
	"hash/crc32"
	"slices"
	"testing"

	"github.com/segmentio/kafka-go/compress"
	"github.com/twmb/franz-go/pkg/kmsg"
)

func FuzzDecode(f *testing.F) {
	for _, codec := range codecs {
		b := testBatch{base: 5, values: numbered("v", 0, 4), attributes: codec | transactionBit, producer: 3}.append(nil)
		f.Add(marker(b, 9, 3, false), int64(6), true)
	}
	f.Add(oldMessageBytes(1, 1, 1, 5, string(pack(compress.Gzip, oldMessageBytes(1, 0, 0, 5, "a")))), int64(0), true)
	f.Add(oldMessageBytes(0, 0, 1, 5, "a"), int64(0), false)
	f.Fuzz(func(t *testing.T, data []byte, next int64, sealed bool) {
		data = slices.Clone(data)
		for i := 0; sealed && i+atMagic < len(data); { // else hardly anything would get past the checksums
			size := int(int32(binary.BigEndian.Uint32(data[i+atLength:])))
			if size < atOldBody || size > len(data)-i-prefix {
				break
			}
			if b := data[i : i+prefix+size]; b[atMagic] == 2 {
				seal(b)
			} else {
				binary.BigEndian.PutUint32(b[atOldCRC:], crc32.ChecksumIEEE(b[atMagic:]))
			}
			i += prefix + size
		}
		d := decoder{most: 1 << 20}
		d.begin(data, next, []aborted{{3, 5}})
		err := d.batches(0, len(data))
		var dmg *damage
		if err != nil && !errors.As(err, &dmg) {
			t.Fatalf("an error of another kind: %v", err)
		}
		at := next
		for _, m := range d.messages {
			if m.Offset < at || m.Start < 0 || m.Start > m.End || m.End > len(d.data) || m.Stamp < 0 {
				t.Fatalf("message %+v after offset %d in %d bytes", m, at, len(d.data))
			}
			at = m.Offset + 1
		}
		if d.next < at {
			t.Fatalf("next %d, after messages up to %d", d.next, at)
		}
	})
}

func FuzzAnswers(f *testing.F) {
	f.Add([]byte{0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 1, 0, 1, 't', 0, 0, 0, 1, 0, 0, 0, 2})
	res := kmsg.NewPtrMetadataResponse()
	res.Version = metadataVersion
	res.Topics = []kmsg.MetadataResponseTopic{{Topic: kmsg.StringPtr("t"), Partitions: []kmsg.MetadataResponseTopicPartition{{Partition: 1, Leader: 2, Replicas: []int32{2}}}}}
	f.Add(append([]byte{0}, res.AppendTo(nil)...))
	f.Fuzz(func(t *testing.T, data []byte) {
		if got, err := parseFetch(data, wanted{topic: "t", partition: 2}, nil); err == nil && (got.start < 0 || got.end > len(data) || got.start > got.end) {
			t.Fatalf("records at %d to %d of %d bytes", got.start, got.end, len(data))
		}
		if _, err := parseLayout(data); err != nil && !errors.Is(err, errGarbled) {
			t.Fatal(err)
		}
		parseMembers(data)
	})
}
