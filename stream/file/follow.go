package file

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"time"

	"go.uber.org/zap"

	"stillwell/stream"
)

// partingLooks is how often we look at the end of a rotated file that is still
// being written to before we leave it.
const partingLooks = 50

// resume opens the generation to begin with, at the position to begin at.
func (r *reader) resume(ctx context.Context) error {
	if !r.known || r.from == (stream.Position{}) {
		return r.openPresent(ctx)
	}
	m, err := parseMark(r.from.Mark)
	if err != nil {
		return fmt.Errorf("file: %s: %w", r.path, err)
	}
	found, err := r.goTo(ctx, m, r.from.Offset, true)
	if err != nil || found {
		return err
	}
	r.gap(r.from.Offset, r.from.Offset, fmt.Sprintf("the file read up to position %d is no longer under %s and not beside it: reading goes on with what is there now", r.from.Offset, r.path))
	return r.openPresent(ctx)
}

// openPresent opens what is under the path, from its start, if anything is.
func (r *reader) openPresent(ctx context.Context) error {
	g, err := openGeneration(ctx, r.path)
	if errors.Is(err, fs.ErrNotExist) && r.cfg.Follow {
		r.turnTo(nil)
		return nil
	}
	if err != nil {
		return err
	}
	r.turnTo(g)
	return nil
}

// goTo finds the marked file, under the path if it may be there or else beside it,
// and goes to a position in it.
func (r *reader) goTo(ctx context.Context, m mark, at int64, present bool) (found bool, err error) {
	var g *generation
	if present {
		g, err = r.folder.take(ctx, r.path, m, at)
	}
	if g == nil && err == nil {
		g, err = r.folder.find(ctx, m, at)
	}
	if g == nil {
		return false, err
	}
	if g.path != r.path {
		r.log.Info("reading on in a file moved meanwhile", zap.String("moved", g.path), zap.Int64("position", at))
	}
	r.adopt(g)
	return true, nil
}

// follow reads on and on.
func (r *reader) follow(ctx context.Context) error {
	for {
		err := r.drain(ctx)
		switch {
		case errors.Is(err, errCut):
			err = r.afterCut(ctx)
		case err == io.EOF:
			err = r.atEnd(ctx)
		}
		if err != nil {
			return err
		}
	}
}

// atEnd finds out why the content ends, and waits or turns to another generation.
func (r *reader) atEnd(ctx context.Context) error {
	info, err := os.Stat(r.path)
	absent := errors.Is(err, fs.ErrNotExist)
	if absent {
		_, err = os.Stat(filepath.Dir(r.path)) // without its folder we know nothing of the file
	}
	g := r.gen
	switch {
	case err != nil:
		return r.hindered(ctx, err)
	case absent && g == nil:
		if trouble := "the file does not exist yet: waiting for it"; r.said != trouble {
			r.said = trouble
			r.log.Info(trouble)
		}
		return r.rest(ctx)
	case g == nil:
		if err := r.openPresent(ctx); err != nil {
			return r.hindered(ctx, err)
		}
		return nil
	case !g.whole():
		return r.afterCut(ctx)
	case !absent && os.SameFile(info, g.info):
		return r.atPresentEnd(ctx, info)
	}
	return r.atPartedEnd(ctx, absent)
}

// rest tells that nothing more is there at present, and waits a little.
func (r *reader) rest(ctx context.Context) error {
	r.to.CaughtUp(r.p)
	return r.pause(ctx)
}

func (r *reader) pause(ctx context.Context) error {
	select {
	case <-ctx.Done():
		return ctx.Err()
	case <-time.After(r.cfg.Poll):
		return nil
	}
}

// hindered says once what is in the way, and waits for it to go.
func (r *reader) hindered(ctx context.Context, err error) error {
	if r.said != err.Error() {
		r.said = err.Error()
		r.log.Warn("the file cannot be read at present: trying on", zap.Error(err))
	}
	return r.pause(ctx)
}

// atPresentEnd: the file under the path has been read as far as it goes.
func (r *reader) atPresentEnd(ctx context.Context, info fs.FileInfo) error {
	g := r.gen
	r.parted.looks = 0
	switch {
	case !g.begun:
		return r.rest(ctx)
	case g.form != plain && info.Size() != g.meter.size.Load():
		// It is still being written. Decompression cannot be taken up where it ended.
		found, err := r.goTo(ctx, g.markTo(r.next), r.next, true)
		if err != nil {
			return r.hindered(ctx, err)
		}
		if !found {
			return r.afterCut(ctx)
		}
		return nil
	case g.form == plain && info.Size() > g.pos:
		return nil // read on
	}
	r.said = ""
	return r.rest(ctx)
}

// atPartedEnd: a file that is no longer under the path has been read to its end.
// It is left when a newer one has content and this one has not grown for a while: its
// writer may hold on to it.
func (r *reader) atPartedEnd(ctx context.Context, absent bool) error {
	g := r.gen
	if g.begun && !absent {
		// Under the path may be the same content once more, as tools that copy logs put it.
		same, err := r.folder.take(ctx, r.path, g.markTo(r.next), r.next)
		if err != nil {
			return r.hindered(ctx, err)
		}
		if same != nil {
			r.adopt(same)
			return nil
		}
	}
	newer, err := r.folder.after(ctx, g)
	if err != nil {
		return r.hindered(ctx, err)
	}
	if newer == nil {
		return r.rest(ctx)
	}
	if g.form == plain && g.meter.size.Load() > g.pos && r.parted.looks < partingLooks {
		newer.close()
		return nil // it has grown while we looked around
	}
	held := !g.begun || g.form == plain // somebody may write to it still
	if grew := r.parted.looks == 0 || g.pos > r.parted.pos; held && grew && r.parted.looks < partingLooks {
		newer.close()
		r.parted.looks++
		r.parted.pos = g.pos
		return r.pause(ctx)
	}
	if !g.begun {
		newer.close()
		return r.begin(ctx, true, 0, 0) // what little is there is all
	}
	if err := r.finish(ctx); err != nil {
		newer.close()
		return err
	}
	r.log.Info("reading on in the next file", zap.String("file", newer.path), zap.Int64("read", g.pos))
	r.turnTo(newer)
	return nil
}

// afterCut goes on in a copy made before the file was cut, if there is one, and
// else starts again at the file's start.
func (r *reader) afterCut(ctx context.Context) error {
	g := r.gen
	if g.begun {
		found, err := r.goTo(ctx, g.markTo(r.next), r.next, false)
		if err != nil {
			return r.hindered(ctx, err)
		}
		if found {
			r.gen.expected = g.expected
			return nil
		}
		if g.expected > r.next {
			r.gap(r.next, g.expected, g.path+" was cut or written over before it was read to its end")
			g.expected = 0 // said once
		}
	}
	r.log.Warn("the file was cut or written over: reading on in what is there now", zap.String("file", g.path))
	if info, err := os.Stat(r.path); err != nil || !os.SameFile(info, g.info) {
		newer, err := r.folder.after(ctx, g)
		if err != nil {
			return r.hindered(ctx, err)
		}
		if newer != nil {
			r.turnTo(newer)
			return nil
		}
	}
	if err := r.openPresent(ctx); err != nil {
		return r.hindered(ctx, err)
	}
	return nil
}
