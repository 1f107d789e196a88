//go:build integration

package station

import (
	"context"
	"errors"
	"slices"
	"sync"
	"testing"
	"time"

	kafkago "github.com/segmentio/kafka-go"
	"go.uber.org/zap"

	"stillwell/cmd/stillwell/internal/ferry"
	"stillwell/config"
	"stillwell/online"
	"stillwell/stream"
	"stillwell/stream/kafka"
	"stillwell/stream/kafka/kafkatest"
	"stillwell/stream/order"
)

const drained = 1_000_000

// BenchmarkKafka reads a topic of four partitions from a real broker, to the end: raw, by
// the library's ReadMessage, and through the whole engine. The two take turns, and
// "of-raw" is the ratio of their median speeds.
//
//	go test -tags integration ./cmd/stillwell/internal/station -run '^$' -bench Kafka -benchtime 5x
func BenchmarkKafka(b *testing.B) {
	broker := kafkatest.Start(b, kafkatest.Options{})
	broker.CreateTopic("harbour", 4, nil)
	site := ferry.New(ferry.Config{Seed: 1, From: time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC), PerHour: 5000, Effect: 0.05, Disordered: true})
	parts := make([][][]byte, 4)
	for i := range drained {
		line, _ := site.Next()
		parts[i%4] = append(parts[i%4], slices.Clone(line))
	}
	for p, lines := range parts {
		broker.Produce("harbour", int32(p), lines)
	}
	f, err := config.Parse("study.yaml", []byte(benchStudy))
	if err != nil {
		b.Fatal(err)
	}
	if err := f.Plan.Compile(); err != nil {
		b.Fatal(err)
	}
	var raw, whole []float64
	for b.Loop() {
		start := time.Now()
		drainRaw(b, broker.Addr)
		raw = append(raw, drained/time.Since(start).Seconds())
		start = time.Now()
		drainWhole(b, broker.Addr, f)
		whole = append(whole, drained/time.Since(start).Seconds())
	}
	slices.Sort(raw)
	slices.Sort(whole)
	b.ReportMetric(raw[len(raw)/2]/1e6, "raw-M/s")
	b.ReportMetric(whole[len(whole)/2]/1e6, "whole-M/s")
	b.ReportMetric(whole[len(whole)/2]/raw[len(raw)/2], "of-raw")
}

func drainRaw(b *testing.B, addr string) {
	var wg sync.WaitGroup
	for p := range 4 {
		wg.Go(func() {
			conn, err := kafkago.DialLeader(context.Background(), "tcp", addr, "harbour", p)
			if err != nil {
				b.Error(err)
				return
			}
			defer conn.Close()
			for left := drained / 4; left > 0; {
				batch := conn.ReadBatchWith(kafkago.ReadBatchConfig{MinBytes: 1, MaxBytes: 1 << 20, MaxWait: 100 * time.Millisecond})
				for {
					if _, err := batch.ReadMessage(); err != nil {
						break
					}
					left--
				}
				if err := batch.Close(); err != nil {
					b.Error(err)
					return
				}
			}
		})
	}
	wg.Wait()
}

var errDrained = errors.New("drained")

// drainWhole takes the topic through source, decoder, sequencer, shards and desk.
func drainWhole(b *testing.B, addr string, f *config.File) {
	src, err := kafka.New(kafka.Config{Brokers: []string{addr}, Topics: []string{"harbour"}, Log: zap.NewNop()})
	if err != nil {
		b.Fatal(err)
	}
	eng := newEngine(f.Plan, order.New(sequencing(f)), 2, func(online.Output) error { return nil })
	var readers []*reader
	for range 2 {
		r, err := newReader(f.Plan, rules(f), nil)
		if err != nil {
			b.Fatal(err)
		}
		readers = append(readers, r)
	}
	left := drained
	err = flow(b.Context(), stream.Source(src), newIntake(nil), readers, func(j *job) error {
		switch j.kind {
		case jobOpen:
			eng.seq.Open(j.part, nil)
		case jobChunk:
			left -= j.batch.Len()
			if err := eng.add(j.batch); err != nil {
				return err
			}
			if left <= 0 {
				return errDrained
			}
		}
		return nil
	})
	if !errors.Is(err, errDrained) {
		b.Fatal(err)
	}
}
