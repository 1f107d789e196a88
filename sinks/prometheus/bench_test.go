package prometheus

import (
	"fmt"
	"testing"

	prom "github.com/prometheus/client_golang/prometheus"

	"stillwell/online"
)

// step is an output with n readings: contrasts of one arm in 100 segments, by turns.
func step(n int) (o online.Output) {
	for i := range n {
		r := effect("wide", platform(fmt.Sprintf("p-%d", i%100)))
		r.Estimate = fmt.Sprintf("estimate-%d", i/100)
		r.StdError, r.Heaviest, r.Interval, r.Anytime = p(0.25), p(0.5), &[2]float64{0, 1}, &[2]float64{-1, 2}
		r.Provision = &online.Provisional{Value: p(0.5)}
		o.Latest = append(o.Latest, r)
	}
	return o
}

// What a step costs the stream: no memory once its labels are known.
//
//	go test ./sinks/prometheus -run '^$' -bench . -count 5
func BenchmarkEmit(b *testing.B) {
	s := newSink(b, Config{})
	o := step(1000)
	s.Emit(o)
	b.ReportAllocs()
	for b.Loop() {
		s.Emit(o)
	}
}

// full is a sink at its bound: 5,000 contrasts, each with its baseline's count.
func full(b *testing.B) *Sink {
	s := newSink(b, Config{})
	s.Emit(step(5000))
	if n := len(s.latest.readings.rows); n != defaultMaxSeries {
		b.Fatalf("%d rows, want %d", n, defaultMaxSeries)
	}
	return s
}

// For how long a scrape of a full page can hold up the stream.
func BenchmarkCopy(b *testing.B) {
	s := full(b)
	for b.Loop() {
		s.latest.copy()
	}
}

// What a full page costs a scrape, before it is written.
func BenchmarkScrape(b *testing.B) {
	s := full(b)
	reg := prom.NewRegistry()
	reg.MustRegister(s.latest)
	b.ReportAllocs()
	for b.Loop() {
		if _, err := reg.Gather(); err != nil {
			b.Fatal(err)
		}
	}
}

func TestEmitAllocatesNothing(t *testing.T) {
	s := newSink(t, Config{})
	o := step(200)
	o.Watches = []online.WatchReading{watch(online.StateWatching, "wide", platform("web"))}
	s.Emit(o)
	if n := testing.AllocsPerRun(20, func() { s.Emit(o) }); n != 0 {
		t.Errorf("Emit of known readings allocates %g times", n)
	}
}
