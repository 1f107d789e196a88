package station

import (
	"fmt"
	"testing"
	"time"

	"go.uber.org/zap"

	"stillwell/config"
	"stillwell/online"
	"stillwell/online/expr"
	"stillwell/stream/order"
)

// crowd feeds an engine with events of its own making, past the decoder and the sequencer.
type crowd struct {
	eng  *engine
	plan *online.Plan
	rec  expr.Record
	slot map[string]int
	buf  []byte
	n    int
}

func newCrowd(b *testing.B) *crowd {
	b.Helper()
	f, err := config.Parse("study.yaml", []byte(benchStudy))
	if err != nil {
		b.Fatal(err)
	}
	if err := f.Plan.Compile(); err != nil {
		b.Fatal(err)
	}
	c := &crowd{plan: f.Plan, slot: map[string]int{}}
	c.eng = newEngine(f.Plan, order.New(sequencing(f)), 2, func(online.Output) error { return nil })
	for i, name := range f.Plan.Fields.Names() {
		c.slot[name] = i
	}
	c.rec = make(expr.Record, len(c.slot))
	return c
}

func text(s string) expr.Value { return expr.Value{Kind: expr.Text, Text: []byte(s)} }

// event applies one event of a passenger.
func (c *crowd) event(at int64, passenger int, kind string, amount float64) {
	clear(c.rec)
	c.rec[c.slot["type"]] = text(kind)
	c.rec[c.slot["passenger"]] = text(fmt.Sprintf("p-%08d", passenger))
	switch kind {
	case "assign":
		c.rec[c.slot["trial"]] = text("seat-map")
		c.rec[c.slot["arm"]] = text([]string{"current", "wide"}[passenger%2])
		c.rec[c.slot["platform"]] = text([]string{"web", "app"}[passenger/2%2])
	case "ticket":
		c.rec[c.slot["amount"]] = expr.Value{Kind: expr.Number, Num: amount, Text: []byte("1")}
	}
	payload, fault := c.plan.Project(c.rec, at, c.buf[:0])
	if fault != nil {
		panic(fault)
	}
	c.buf = payload
	c.n++
	c.eng.deliver(order.Event{At: at, Payload: append([]byte(nil), payload...)})
	if c.eng.pending >= enough {
		c.eng.apply(order.Never, false)
	}
}

// BenchmarkStep evaluates steps of 1,000 events each after more and more events: the cost
// must not depend on how many came before.
//
//	go test ./cmd/stillwell/internal/station -run '^$' -bench Step -benchtime 200x -timeout 30m
func BenchmarkStep(b *testing.B) {
	for _, before := range []int{1e4, 1e6, 1e7} {
		b.Run(fmt.Sprintf("events=%d", before), func(b *testing.B) {
			c := newCrowd(b)
			every, at := int64(c.plan.Every), int64(1_772_323_200e9)
			passenger := 0
			// A thousandth of a day apart, so that each step brings and completes as many.
			tick := func(k int) {
				switch k % 4 {
				case 0:
					passenger++
					c.event(at, passenger, "assign", 0)
				case 1, 2:
					c.event(at, passenger, "visit", 0)
				default:
					c.event(at, passenger, "ticket", float64(10+passenger%90))
				}
			}
			T := at/every*every + every
			for k := range before {
				at += every / 1000
				if at > T {
					if err := c.eng.end(T, false); err != nil {
						b.Fatal(err)
					}
					T += every
				}
				tick(k)
			}
			b.ResetTimer()
			for b.Loop() {
				b.StopTimer()
				for k := range 1000 {
					at += every / 1000
					if at > T {
						break
					}
					tick(k)
				}
				c.eng.apply(order.Never, false)
				b.StartTimer()
				if err := c.eng.end(T, false); err != nil {
					b.Fatal(err)
				}
				T += every
			}
		})
	}
}

// BenchmarkHeld takes the copy of a million units, all of them changed, that a checkpoint
// is written from: this, and not the writing, holds up the stream.
//
//	go test ./cmd/stillwell/internal/station -run '^$' -bench Held -benchtime 10x
func BenchmarkHeld(b *testing.B) {
	c := newCrowd(b)
	at := int64(1_772_323_200e9)
	for i := range 1_000_000 {
		c.event(at, i, "assign", 0)
	}
	if err := c.eng.end(at+int64(time.Hour), false); err != nil {
		b.Fatal(err)
	}
	k := newKeeper(nil, time.Hour, zap.NewNop(), nil, nil)
	var longest time.Duration
	for b.Loop() {
		k.whole = true
		k.take(c.eng, Meta{})
		longest = max(longest, k.Stats().Held)
		clear(k.unsaved)
	}
	b.ReportMetric(float64(longest.Microseconds())/1000, "ms-longest")
}
