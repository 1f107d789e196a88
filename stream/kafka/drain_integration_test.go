//go:build integration

package kafka

import (
	"context"
	"errors"
	"fmt"
	"io"
	"slices"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	kafkago "github.com/segmentio/kafka-go"
	"github.com/twmb/franz-go/pkg/kgo"

	"stillwell/stream"
	"stillwell/stream/kafka/kafkatest"
)

const (
	drainMessages   = 2_000_000
	drainPartitions = 4
	drainRounds     = 5
)

// How fast is a full topic read, against the library's own ways to do it? All ways take turns, so that what
// else the machine does hits them alike; what counts is the median.
//
//	go test -tags integration ./stream/kafka -run '^$' -bench Drain -benchtime 1x -timeout 20m
func BenchmarkDrain(b *testing.B) {
	broker := kafkatest.Start(b, kafkatest.Options{})
	for _, codec := range []string{"none", "lz4", "zstd"} {
		topic := "harbour." + codec
		fill(b, broker, topic, codec)
		b.Run("codec="+codec, func(b *testing.B) {
			ways := []struct {
				name  string
				drain func(*testing.B, string, string)
				once  bool
				rates []float64
			}{
				{name: "source", drain: drainSource},
				{name: "batch-read-message", drain: drainBatch(readMessages)},
				{name: "batch-read", drain: drainBatch(readValues)},
				{name: "reader", drain: drainReader, once: true},
			}
			for b.Loop() {
				for round := range drainRounds {
					for i := range ways {
						if ways[i].once && round > 0 {
							continue // it takes long
						}
						began := time.Now()
						ways[i].drain(b, broker.Addr, topic)
						ways[i].rates = append(ways[i].rates, drainMessages/time.Since(began).Seconds()/1e6)
					}
				}
			}
			for i := range ways {
				slices.Sort(ways[i].rates)
				b.ReportMetric(ways[i].rates[len(ways[i].rates)/2], ways[i].name+"-M/s")
			}
			for _, w := range ways[1:] {
				b.ReportMetric(ways[0].rates[len(ways[0].rates)/2]/w.rates[len(w.rates)/2], "source/"+w.name)
			}
		})
	}
}

// fill writes messages of 120 bytes that look like events.
func fill(b *testing.B, broker *kafkatest.Broker, topic, codec string) {
	b.Helper()
	broker.CreateTopic(topic, drainPartitions, nil)
	compression := map[string]kgo.CompressionCodec{"none": kgo.NoCompression(), "lz4": kgo.Lz4Compression(), "zstd": kgo.ZstdCompression()}[codec]
	cl := kafkatest.NewClient(b, []string{broker.Addr}, kgo.ProducerBatchCompression(compression), kgo.ProducerLinger(10*time.Millisecond), kgo.MaxBufferedRecords(100_000))
	var failed atomic.Pointer[error]
	for i := range drainMessages {
		value := fmt.Appendf(nil, `{"id":"%08d","type":"ticket","passenger":"p-%05d","amount":%d,"ts":"2026-03-02T10:%02d:%02dZ","ship":"Mira"}`, i, i*7919%100_000, i%90, i/60%60, i%60)
		for len(value) < 120 {
			value = append(value, ' ')
		}
		cl.Client.Produce(context.Background(), &kgo.Record{Topic: topic, Partition: int32(i % drainPartitions), Value: value[:120]}, func(_ *kgo.Record, err error) {
			if err != nil {
				failed.Store(&err)
			}
		})
	}
	if err := cl.Flush(context.Background()); err != nil || failed.Load() != nil {
		b.Fatal(err, failed.Load())
	}
}

// A counter is a receiver that does as little as it can: it looks at each message, as a decoder would.
type counter struct {
	left  atomic.Int64
	done  context.CancelFunc
	mu    sync.Mutex
	bytes int64
}

func (c *counter) Open(name string) (*stream.Partition, stream.Position, bool, error) {
	return &stream.Partition{Name: name}, stream.Position{}, false, nil
}

func (c *counter) Chunk(_ context.Context, chunk *stream.Chunk) error {
	n := int64(0)
	for _, m := range chunk.Messages {
		n += int64(m.End - m.Start)
	}
	c.mu.Lock()
	c.bytes += n
	c.mu.Unlock()
	if c.left.Add(-int64(len(chunk.Messages))) == 0 {
		c.done()
	}
	chunk.Release()
	return nil
}

func (c *counter) End(*stream.Partition)                       {}
func (c *counter) CaughtUp(*stream.Partition)                  {}
func (c *counter) Gap(*stream.Partition, int64, int64, string) {}

func drainSource(b *testing.B, addr, topic string) {
	s, err := New(Config{Brokers: []string{addr}, Topics: []string{topic}})
	if err != nil {
		b.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(context.Background(), time.Minute)
	c := &counter{done: cancel}
	c.left.Store(drainMessages)
	if err := s.Run(ctx, c); err != nil || c.left.Load() != 0 || c.bytes != 120*drainMessages {
		b.Fatalf("%v, %d left, %d bytes", err, c.left.Load(), c.bytes)
	}
}

// drainBatch reads each partition by Conn.ReadBatchWith.
func drainBatch(read func(*kafkago.Batch, int64) (n, bytes int64, err error)) func(*testing.B, string, string) {
	return func(b *testing.B, addr, topic string) {
		var n, size atomic.Int64
		var g sync.WaitGroup
		for p := range drainPartitions {
			g.Go(func() {
				conn, err := kafkago.DialLeader(context.Background(), "tcp", addr, topic, p)
				if err != nil {
					b.Error(err)
					return
				}
				defer conn.Close()
				for at := int64(0); at < drainMessages/drainPartitions; {
					if _, err := conn.Seek(at, kafkago.SeekAbsolute|kafkago.SeekDontCheck); err != nil {
						b.Error(err)
						return
					}
					batch := conn.ReadBatchWith(kafkago.ReadBatchConfig{MinBytes: 1, MaxBytes: 1 << 20, MaxWait: 500 * time.Millisecond})
					messages, bytes, err := read(batch, at)
					n.Add(messages)
					size.Add(bytes)
					at = batch.Offset()
					if closed := batch.Close(); closed != nil || err != nil && !errors.Is(err, io.EOF) {
						b.Error(err, closed)
						return
					}
				}
			})
		}
		g.Wait()
		if n.Load() != drainMessages || size.Load() != 120*drainMessages {
			b.Fatalf("%d messages, %d bytes", n.Load(), size.Load())
		}
	}
}

func readMessages(batch *kafkago.Batch, _ int64) (n, bytes int64, err error) {
	for {
		m, err := batch.ReadMessage()
		if err != nil {
			return n, bytes, err
		}
		n++
		bytes += int64(len(m.Value))
	}
}

func readValues(batch *kafkago.Batch, wanted int64) (n, bytes int64, err error) {
	buf := make([]byte, 4096)
	for {
		size, err := batch.Read(buf)
		if err != nil {
			return n, bytes, err
		}
		if batch.Offset() > wanted { // else it lies before what was asked for
			n++
			bytes += int64(size)
		}
	}
}

func drainReader(b *testing.B, addr, topic string) {
	var g sync.WaitGroup
	for p := range drainPartitions {
		g.Go(func() {
			r := kafkago.NewReader(kafkago.ReaderConfig{Brokers: []string{addr}, Topic: topic, Partition: p, MinBytes: 1, MaxBytes: 1 << 20, QueueCapacity: 10_000})
			defer r.Close()
			for range drainMessages / drainPartitions {
				if _, err := r.ReadMessage(context.Background()); err != nil {
					b.Error(err)
					return
				}
			}
		})
	}
	g.Wait()
}
