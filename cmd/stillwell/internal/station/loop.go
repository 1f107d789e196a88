package station

import (
	"context"
	"errors"
	"fmt"

	"golang.org/x/sync/errgroup"

	"stillwell/stream"
)

// flow runs a source through decoding workers and calls handle with what it says, in
// order, from one goroutine. It returns when the source has ended and all is handled, when
// ctx is done (with what had come by then handled or dropped), or at the first error.
func flow(ctx context.Context, src stream.Source, in *intake, readers []*reader, handle func(*job) error) error {
	ctx, stop := context.WithCancel(ctx)
	defer stop()
	g, ctx := errgroup.WithContext(ctx)
	var workers errgroup.Group
	for _, r := range readers {
		workers.Go(func() error { in.decode(r); return nil })
	}
	g.Go(func() error {
		defer close(in.ordered)
		defer workers.Wait()
		defer close(in.jobs)
		if err := src.Run(ctx, in); err != nil && !errors.Is(err, context.Canceled) {
			return fmt.Errorf("source: %w", err)
		}
		return nil
	})
	g.Go(func() error {
		var failed error
		for j := range in.ordered { // to its end, so that the source is never stuck
			if failed != nil || ctx.Err() != nil {
				continue
			}
			if j.ready != nil {
				<-j.ready
			}
			if failed = handle(j); failed != nil {
				stop()
			}
		}
		return failed
	})
	return g.Wait()
}
