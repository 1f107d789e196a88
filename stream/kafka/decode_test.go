package kafka

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"slices"
	"testing"
	"time"

	"github.com/segmentio/kafka-go/compress"
	"github.com/segmentio/kafka-go/protocol"
	"pgregory.net/rapid"

	"stillwell/stream"
)

// The library writes record sets; what is read back must be what was written.
func TestDecodesWhatTheLibraryWrites(t *testing.T) {
	for _, version := range []int8{1, 2} {
		t.Run(fmt.Sprint("format ", version), rapid.MakeCheck(func(t *rapid.T) {
			var data []byte
			var want []decoded
			base := int64(0)
			for range rapid.IntRange(1, 4).Draw(t, "batches") {
				n := rapid.IntRange(1, 20).Draw(t, "records")
				codec := rapid.SampledFrom(codecs).Draw(t, "codec")
				if version == 1 && codec != 0 {
					codec = 1 + codec%2 // format 1 knows gzip and snappy in a form that all agree on
				}
				var records []protocol.Record
				for i := range n {
					rec := protocol.Record{Time: time.UnixMilli(rapid.Int64Range(1, 4e12).Draw(t, "time"))}
					var value []byte
					if !rapid.Bool().Draw(t, "tombstone") {
						value = rapid.SliceOfN(rapid.Byte(), 0, 300).Draw(t, "value")
						rec.Value = protocol.NewBytes(slices.Clone(value))
					}
					if rapid.Bool().Draw(t, "keyed") {
						rec.Key = protocol.NewBytes([]byte("passenger"))
						if version == 2 {
							rec.Headers = []protocol.Header{{Key: "trace", Value: []byte("x")}, {Key: "empty"}}
						}
					}
					records = append(records, rec)
					want = append(want, decoded{base + int64(i), string(value), rec.Time.UnixNano()})
				}
				var b bytes.Buffer
				rs := protocol.RecordSet{Version: version, Attributes: protocol.Attributes(codec), Records: protocol.NewRecordReader(records...)}
				if _, err := rs.WriteTo(&b); err != nil {
					t.Fatal(err)
				}
				written := b.Bytes()[4:] // without its size
				offsets(written, version, codec != 0, base, n)
				data = append(data, written...)
				base += int64(n)
			}
			next := rapid.Int64Range(0, base).Draw(t, "next")
			want = want[next:]
			got, d, err := decode(data, next)
			if err != nil || !slices.Equal(got, want) || d.next != base {
				t.Fatalf("from %d: got %v, next %d, %v\nwant %v", next, got, d.next, err, want)
			}
		}))
	}
}

func TestTimestamps(t *testing.T) {
	values := [][]byte{[]byte("a"), []byte("b")}
	for _, tt := range []struct {
		name         string
		attributes   int16
		stamp, max   int64
		want0, want1 int64 // nanoseconds
	}{
		{"the producer's", 0, 1000, 1001, 1000e6, 1001e6},
		{"the broker's", appendTimeBit, 1000, 5000, 5000e6, 5000e6},
		{"none", 0, -1, -1, 0, 0},
		{"none from the broker", appendTimeBit, 7, -1, 0, 0},
		{"microseconds by mistake", 0, 1_772_000_000_000_000_000, 0, math.MaxInt64, math.MaxInt64},
		{"beyond all", 0, math.MaxInt64, 0, math.MaxInt64, 0}, // the second has gone round, and is none
	} {
		got, _, err := decode(testBatch{values: values, stamp: tt.stamp, maxStamp: tt.max, attributes: tt.attributes}.append(nil), 0)
		if err != nil || len(got) != 2 || got[0].stamp != tt.want0 || got[1].stamp != tt.want1 {
			t.Errorf("%s: %v, %v, want %d and %d", tt.name, got, err, tt.want0, tt.want1)
		}
	}
}

func TestCompactedBatches(t *testing.T) {
	data := testBatch{base: 10, values: numbered("v", 0, 3), holes: []int64{1, 4, 5}, lastDelta: 9}.append(nil)
	data = testBatch{base: 20, lastDelta: 4}.append(data) // nothing left in it
	data = testBatch{base: 25, values: numbered("w", 0, 1)}.append(data)
	got, d, err := decode(data, 12)
	want := []decoded{{14, "v 1", 1e6}, {15, "v 2", 2e6}, {25, "w 0", 0}}
	if err != nil || !slices.Equal(got, want) || d.next != 26 {
		t.Errorf("got %v, next %d, %v, want %v", got, d.next, err, want)
	}
	if got, d, err := decode(data[:len(data)-10], 16); err != nil || len(got) != 0 || d.next != 25 {
		t.Errorf("behind an emptied batch: got %v, next %d, %v, want to go on at 25", got, d.next, err)
	}
}

// A broker cuts an answer off where it likes.
func TestTruncatedAnswers(t *testing.T) {
	for _, codec := range codecs {
		first := testBatch{values: numbered("v", 0, 5), attributes: codec}.append(nil)
		data := testBatch{base: 5, values: numbered("v", 5, 5), attributes: codec}.append(first)
		for n := range len(data) {
			got, d, err := decode(data[:n], 0)
			want := 0
			if n >= len(first) {
				want = 5
			}
			if err != nil || len(got) != want || d.next != int64(want) {
				t.Fatalf("codec %d, the first %d of %d bytes: got %d messages, next %d, %v", codec, n, len(data), len(got), d.next, err)
			}
		}
	}
}

func TestDamageIsFound(t *testing.T) {
	for _, codec := range codecs {
		good := testBatch{values: numbered("v", 0, 5), attributes: codec}.append(nil)
		data := testBatch{base: 5, values: numbered("v", 5, 5), attributes: codec}.append(slices.Clone(good))
		for i := len(good) + atCRC; i < len(data); i++ {
			bent := slices.Clone(data)
			bent[i] ^= 0x10
			got, d, err := decode(bent, 0)
			var dmg *damage
			if !errors.Is(err, errChecksum) || !errors.As(err, &dmg) || len(got) != 5 || d.next != 5 {
				t.Fatalf("codec %d, byte %d bent: got %d messages, next %d, %v", codec, i, len(got), d.next, err)
			}
		}
	}
}

// With the right checksum, but made by something that is no producer.
func TestMalformedBatches(t *testing.T) {
	for _, tt := range []struct {
		name string
		bend func([]byte) []byte
		want error
	}{
		{"more records than there are", func(b []byte) []byte { b[atCount+3] = 9; return b }, errRecord},
		{"a record longer than the batch", func(b []byte) []byte { b[atRecords] = 0x7e; return b }, errRecord},
		{"the last record longer than the batch", func(b []byte) []byte { b[len(b)-10] += 2; return b }, errRecord},
		{"a record of no length", func(b []byte) []byte { b[atRecords] = 0; return b }, errRecord},
		{"a number without end", func(b []byte) []byte { copy(b[atRecords+2:], "\xff\xff\xff\xff\xff\xff\xff\xff"); return b }, errRecord},
		{"too short for a batch", func(b []byte) []byte { return frame(b[:atRecords-1]) }, errLength},
		{"too short for anything", func(b []byte) []byte { return frame(b[:atMagic]) }, errLength},
		{"a codec that is none", func(b []byte) []byte { b[atAttributes+1] |= 7; return b }, nil},
		{"a format that is none", func(b []byte) []byte { b[atMagic] = 3; return b }, nil},
		{"not what gzip says it is", func(b []byte) []byte { b[atAttributes+1] |= 1; return b }, nil},
		{"not what snappy says it is", func(b []byte) []byte { b[atAttributes+1] |= 2; return b }, nil},
		{"not what lz4 says it is", func(b []byte) []byte { b[atAttributes+1] |= 3; return b }, nil},
		{"not what zstd says it is", func(b []byte) []byte { b[atAttributes+1] |= 4; return b }, nil},
	} {
		b := tt.bend(testBatch{base: 30, values: numbered("v", 0, 3)}.append(nil))
		if len(b) > atAttributes {
			seal(b)
		}
		b = testBatch{base: 33, values: numbered("v", 3, 3)}.append(b)
		got, d, err := decode(b, 30)
		var dmg *damage
		if !errors.As(err, &dmg) || tt.want != nil && !errors.Is(err, tt.want) || len(got) > 3 || d.next > 33 {
			t.Errorf("%s: got %v, next %d, %v, want damage", tt.name, got, d.next, err)
		}
	}
}

func TestABombIsNotUnpacked(t *testing.T) {
	for _, codec := range codecs[1:] {
		b := testBatch{values: [][]byte{make([]byte, 3<<20)}, attributes: codec}.append(nil)
		d := decoder{most: 1 << 20}
		d.begin(b, 0, nil)
		if err := d.batches(0, len(b)); !errors.Is(err, errUnpacked) || cap(d.data) > 4<<20 {
			t.Errorf("codec %d: %v, capacity %d, want %v", codec, err, cap(d.data), errUnpacked)
		}
	}
}

// The broker's clock can replace the producer's in format 1 too: then the wrapper's time holds for all inside.
func TestOldFormats(t *testing.T) {
	inner := oldMessageBytes(1, 0, 0, 111, "a")
	inner = append(inner, oldMessageBytes(1, 0, 1, 222, "b")...)
	wrapped := oldMessageBytes(1, 1|appendTimeBit, 41, 999, string(pack(compress.Gzip, inner)))
	got, d, err := decode(append(wrapped, oldMessageBytes(0, 0, 42, 0, "c")...), 0)
	want := []decoded{{40, "a", 999e6}, {41, "b", 999e6}, {42, "c", 0}}
	if err != nil || !slices.Equal(got, want) || d.next != 43 {
		t.Errorf("got %v, next %d, %v, want %v", got, d.next, err, want)
	}
	inner = append(oldMessageBytes(0, 0, 50, 0, "x"), oldMessageBytes(0, 0, 51, 0, "y")...) // format 0: true offsets inside
	got, _, err = decode(oldMessageBytes(0, 2, 51, 0, string(pack(compress.Snappy, inner))), 51)
	if want := []decoded{{51, "y", 0}}; err != nil || !slices.Equal(got, want) {
		t.Errorf("got %v, %v, want %v", got, err, want)
	}
	twice := oldMessageBytes(1, 1, 5, 0, string(pack(compress.Gzip, oldMessageBytes(1, 1, 0, 0, string(pack(compress.Gzip, inner))))))
	if got, _, err := decode(twice, 0); err == nil {
		t.Errorf("packed twice: got %v", got)
	}
	for i := atMagic; i < len(wrapped); i++ {
		bent := slices.Clone(wrapped)
		bent[i] ^= 4
		if got, _, err := decode(bent, 0); err == nil {
			t.Fatalf("byte %d bent: got %v", i, got)
		}
	}
}

func TestDecodingDoesNotAllocate(t *testing.T) {
	var data []byte
	for i := range 10 {
		data = testBatch{base: int64(i) * 100, values: numbered("v", 0, 100), producer: 7, attributes: transactionBit}.append(data)
	}
	d := decoder{messages: make([]stream.Message, 0, 1000)}
	gone := []aborted{{producer: 8, first: 3}}
	n := testing.AllocsPerRun(100, func() {
		d.begin(data, 5, gone)
		if err := d.batches(0, len(data)); err != nil || len(d.messages) != 995 {
			t.Fatal(len(d.messages), err)
		}
	})
	if n != 0 {
		t.Errorf("%v allocations for 1000 messages", n)
	}
}

// How long does a message take, apart from all that lies between us and the broker?
//
//	go test ./stream/kafka -run '^$' -bench Decode
func BenchmarkDecode(b *testing.B) {
	for _, codec := range []compress.Compression{compress.None, compress.Lz4, compress.Zstd} {
		b.Run("codec="+codec.String(), func(b *testing.B) {
			values := numbered(string(bytes.Repeat([]byte("seat-map "), 12)), 0, 1000)
			data := testBatch{values: values, stamp: 1_772_000_000_000, attributes: int16(codec)}.append(nil)
			d := decoder{}
			n := len(data)
			b.ReportAllocs()
			for b.Loop() {
				d.begin(data[:n:n], 0, nil)
				if err := d.batches(0, n); err != nil || len(d.messages) != 1000 {
					b.Fatal(len(d.messages), err)
				}
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/1000, "ns/message")
		})
	}
}

func TestVarints(t *testing.T) {
	for _, v := range []int64{0, 1, -1, 63, 64, -64, -65, 127, 128, 8191, 8192, -8192, -8193, 1 << 20, -1 << 40, math.MaxInt64, math.MinInt64} {
		b := binary.AppendVarint([]byte{9}, v)
		for _, tail := range []string{"", "\x00", "\xff"} {
			if got, next := varint(append(b, tail...), 1); got != v || next != len(b) {
				t.Errorf("%d: got %d, next %d, want %d", v, got, next, len(b))
			}
		}
		if _, next := varint(b[:len(b)-1], 1); next != -1 {
			t.Errorf("%d, cut off: next %d", v, next)
		}
	}
}
