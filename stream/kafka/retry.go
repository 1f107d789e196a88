package kafka

import (
	"context"
	"math/rand/v2"
	"time"

	"go.uber.org/zap"
	"go.uber.org/zap/zapcore"
)

const (
	firstPause = 100 * time.Millisecond
	tellEvery  = 30 * time.Second
)

// trouble is a run of failures in a row: it spaces out the attempts, and says what goes on, but not all the
// time.
type trouble struct {
	log       *zap.Logger
	longPause time.Duration
	since     time.Time // the first failure; zero: none
	tries     int
	told      time.Time
}

// pause takes note of a failure and waits before the next attempt: twice as long each time up to longPause,
// by a random part shorter, so that not all come back at once. The first failure of a row is told only to
// those who debug, as a leader that moves is nothing unusual.
func (t *trouble) pause(ctx context.Context, err error) error {
	now := time.Now()
	if t.tries == 0 {
		t.since = now
	}
	t.tries++
	switch {
	case t.tries == 1:
		t.log.Debug("interrupted, trying again", zap.Error(err))
	case now.Sub(t.told) >= tellEvery:
		t.told = now
		t.log.Warn("cannot go on, trying again", zap.Error(err), zap.Int("tries", t.tries),
			zap.Duration("for", now.Sub(t.since).Round(time.Millisecond)))
	}
	return sleep(ctx, nextPause(t.tries, t.longPause))
}

func nextPause(tries int, longest time.Duration) time.Duration {
	d := min(firstPause<<min(tries-1, 10), longest)
	return d/2 + rand.N(d/2)
}

// over ends the row.
func (t *trouble) over() {
	if !t.told.IsZero() {
		t.log.Info("going on again", zap.Int("tries", t.tries),
			zap.Duration("after", time.Since(t.since).Round(time.Millisecond)))
	}
	t.since, t.tries, t.told = time.Time{}, 0, time.Time{}
}

func sleep(ctx context.Context, d time.Duration) error {
	select {
	case <-time.After(d):
		return nil
	case <-ctx.Done():
		return ctx.Err()
	}
}

// sampled lets a few of many equal messages through: a broker that goes down interrupts all of its partitions
// at once.
func sampled(log *zap.Logger) *zap.Logger {
	return log.WithOptions(zap.WrapCore(func(c zapcore.Core) zapcore.Core {
		return zapcore.NewSamplerWithOptions(c, tellEvery, 5, 0)
	}))
}
