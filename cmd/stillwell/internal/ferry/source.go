package ferry

import (
	"context"
	"time"

	"stillwell/stream"
)

// Source is a site as a stream of one partition, whose time runs Speed times as fast as the
// clock on the wall. It ends after For of its own time; 0: never.
type Source struct {
	Config Config
	Speed  float64
	For    time.Duration
}

// tick is how often events are handed over.
const tick = 50 * time.Millisecond

// Run implements stream.Source.
func (s *Source) Run(ctx context.Context, to stream.Receiver) error {
	p, _, _, err := to.Open("ferry")
	if err != nil {
		return err
	}
	site := New(s.Config)
	line, at := site.Next()
	start, base := time.Now(), int64(0)
	clock := time.NewTicker(tick)
	defer clock.Stop()
	for {
		passed := time.Duration(float64(time.Since(start)) * s.Speed)
		if s.For > 0 {
			passed = min(passed, s.For)
		}
		var data []byte
		for now := s.Config.From.Add(passed); !at.After(now); line, at = site.Next() {
			data = append(append(data, line...), '\n')
		}
		if len(data) > 0 {
			if err := to.Chunk(ctx, &stream.Chunk{Partition: p, Data: data, Base: base, Release: func() {}}); err != nil {
				return err
			}
			base += int64(len(data))
		}
		if s.For > 0 && passed == s.For {
			to.End(p)
			return nil
		}
		select {
		case <-clock.C:
		case <-ctx.Done():
			return ctx.Err()
		}
	}
}
