package file

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"sync/atomic"

	"go.uber.org/zap"

	"stillwell/stream"
)

// A line is too long for us, and is cut off, when it has more than MaxLine+1 bytes
// in the buffer: one may be a '\r', which is no part of the line. One byte more is
// kept, so that the reader of what is left finds more than MaxLine.
const lineSlack = 2

// errCut says that a followed file was cut or written over.
var errCut = errors.New("the file was cut or written over")

// A reader reads one partition.
type reader struct {
	cfg     *Config
	buffers *buffers
	log     *zap.Logger
	folder  folder
	path    string

	to    stream.Receiver
	p     *stream.Partition
	from  stream.Position
	known bool

	gen      *generation // nil: nothing to read yet
	next     int64       // position of what was not handed over yet
	carry    []byte      // content there that was read: the start of a line
	skipping bool        // next is in a line of which nothing more is wanted

	parted struct { // a followed file that is no longer under its path
		looks int   // at its end since
		pos   int64 // at the last of them
	}
	said string // the last trouble logged

	before atomic.Int64 // bytes read of earlier generations
	meter  atomic.Pointer[meter]
}

func newReader(s *Source, path string) *reader {
	log := s.cfg.Log.With(zap.String("path", path))
	return &reader{cfg: &s.cfg, buffers: &s.buffers, log: log, path: path, folder: folder{path: path, cfg: &s.cfg, log: log}}
}

func (r *reader) announce(to stream.Receiver) (err error) {
	r.to = to
	r.p, r.from, r.known, err = to.Open(r.path)
	return err
}

func (r *reader) progress() (done, total int64) {
	done = r.before.Load()
	m := r.meter.Load()
	if m == nil {
		return done, -1
	}
	if total = m.size.Load(); total >= 0 {
		total += done
	}
	return done + m.read.Load(), total
}

func (r *reader) run(ctx context.Context) (err error) {
	ctx, cancel := context.WithCancel(ctx)
	defer func() {
		if err != nil {
			cancel() // for whatever still waits for a pipe
		}
		if r.gen != nil {
			r.gen.close()
		}
		cancel()
	}()
	if r.path == StdinName {
		r.adopt(streamGeneration(ctx, r.cfg.Stdin))
		return r.readStream(ctx)
	}
	if info, err := os.Stat(r.path); err == nil && !info.IsDir() && !info.Mode().IsRegular() {
		g, err := openGeneration(ctx, r.path)
		if err != nil {
			return err
		}
		r.adopt(g)
		return r.readStream(ctx)
	}
	if err := r.resume(ctx); err != nil {
		return err
	}
	if r.cfg.Follow {
		return r.follow(ctx)
	}
	return r.readAll(ctx)
}

// readStream reads a pipe to its end. What an earlier process has read of it comes
// again if somebody writes it again.
func (r *reader) readStream(ctx context.Context) error {
	if r.known && r.from != (stream.Position{}) {
		m, err := parseMark(r.from.Mark)
		if err != nil {
			return fmt.Errorf("file: %s: %w", r.path, err)
		}
		if err := r.begin(ctx, true, m.n, 0); err != nil {
			return err
		}
		at := r.from.Offset
		if !m.matches(r.gen.head.bytes) {
			r.log.Warn("this is not the stream that was read before: reading it from its start")
			at = 0
		}
		err = r.seek(ctx, at)
		if errors.Is(err, errTooShort) {
			r.log.Warn("the stream ends before the position where reading stopped: nothing in it is new", zap.Int64("position", at))
			r.to.End(r.p)
			return nil
		}
		if err != nil {
			return err
		}
	}
	return r.readAll(ctx)
}

// readAll reads the present generation and those after it to the end.
func (r *reader) readAll(ctx context.Context) error {
	for {
		if err := r.drain(ctx); err != io.EOF {
			return err
		}
		g := r.gen
		if g.damage != nil {
			return fmt.Errorf("file: %s: %s data is damaged or cut short after %d bytes of content: %w: fetch or compress the file again", g.path, g.form, g.pos, g.damage)
		}
		if err := r.finish(ctx); err != nil {
			return err
		}
		var newer *generation
		if info, err := os.Stat(r.path); g.regular && (err != nil || !os.SameFile(info, g.info)) {
			if newer, err = r.folder.after(ctx, g); err != nil {
				return err
			}
		}
		if newer == nil {
			r.to.End(r.p)
			return nil
		}
		r.turnTo(newer)
	}
}

// adopt makes g the generation to read, from where it stands.
func (r *reader) adopt(g *generation) {
	if r.gen != nil {
		r.gen.close()
	}
	r.gen, r.next, r.carry, r.skipping = g, 0, r.carry[:0], false
	r.parted.looks = 0
	r.said = ""
	if g != nil {
		r.next, r.skipping = g.pos, g.inLine
		r.meter.Store(&g.meter)
	}
}

// turnTo goes on with another generation than before.
func (r *reader) turnTo(g *generation) {
	if r.gen != nil {
		r.before.Add(r.gen.meter.read.Load())
	}
	r.adopt(g)
}

// begin begins the generation, where it is to be read from a position that seek goes to.
func (r *reader) begin(ctx context.Context, complete bool, want int, at int64) error {
	g := r.gen
	if err := g.begin(r.cfg.CSV, r.cfg.MaxLine, complete, want); err != nil {
		return err
	}
	if g.regular && g.form == plain && !r.cfg.Follow {
		g.expected = g.info.Size()
	}
	return r.seek(ctx, at)
}

func (r *reader) seek(ctx context.Context, at int64) error {
	err := r.gen.seek(ctx, at)
	r.next, r.skipping = r.gen.pos, r.gen.inLine
	return err
}

// drain reads and hands over until nothing more is there, which it says by io.EOF.
func (r *reader) drain(ctx context.Context) error {
	for {
		if err := r.step(ctx); err != nil {
			return err
		}
	}
}

// step reads once, at the partition's gate's leave, and hands over what lines are whole.
func (r *reader) step(ctx context.Context) error {
	if err := r.p.Wait(ctx); err != nil {
		return err
	}
	g := r.gen
	if g == nil {
		return io.EOF
	}
	if !g.begun {
		err := r.begin(ctx, !r.cfg.Follow, 0, 0)
		if errors.Is(err, errTooEarly) {
			return io.EOF
		}
		if err != nil {
			return err
		}
	}
	b := r.buffers.get()
	front := r.buffers.front
	n, err := g.fill(b.mem[front:])
	if r.cfg.Follow && g.regular && n > 0 && !g.whole() {
		r.buffers.put(b)
		return errCut
	}
	g.keep(b.mem[front : front+n])
	if err == io.EOF && n > 0 {
		err = nil // the next step meets it again
	}
	start := front - len(r.carry)
	copy(b.mem[start:], r.carry)
	if over := r.cutLines(ctx, b, b.mem[start:front+n]); over != nil {
		return over
	}
	return err
}

// cutLines hands over the whole lines of content, which lies in b at r.next, and
// keeps the rest.
func (r *reader) cutLines(ctx context.Context, b *buffer, content []byte) error {
	if r.skipping {
		n := bytes.IndexByte(content, '\n') + 1
		if n == 0 {
			n = len(content)
		} else {
			r.skipping = false
		}
		r.next += int64(n)
		content = content[n:]
	}
	n := bytes.LastIndexByte(content, '\n') + 1
	base := r.next
	r.next += int64(n)
	r.carry = append(r.carry[:0], content[n:]...)
	if n == 0 {
		r.buffers.put(b)
	} else if err := r.hand(ctx, b, content[:n], base, false); err != nil {
		return err
	}
	if len(r.carry) >= r.cfg.MaxLine+lineSlack {
		return r.handRest(ctx)
	}
	return nil
}

// handRest hands over what was carried as a line, however it goes on.
func (r *reader) handRest(ctx context.Context) error {
	if len(r.carry) == 0 {
		return nil
	}
	b := r.buffers.get()
	n := copy(b.mem, r.carry[:min(len(r.carry), r.cfg.MaxLine+lineSlack)])
	base := r.next
	r.next += int64(len(r.carry))
	r.carry, r.skipping = r.carry[:0], true
	return r.hand(ctx, b, b.mem[:n], base, true)
}

func (r *reader) hand(ctx context.Context, b *buffer, data []byte, base int64, final bool) error {
	c := &b.chunk
	c.Partition, c.Data, c.Base, c.Final = r.p, data, base, final
	c.Mark, c.Header = r.gen.head.fullMark(r.gen.id), r.gen.header
	return r.to.Chunk(ctx, c)
}

// finish ends a generation of which nothing more will come.
func (r *reader) finish(ctx context.Context) error {
	g := r.gen
	if g.damage != nil {
		r.gap(r.next, r.next, fmt.Sprintf("%s: %s data is damaged or cut short: %v", g.path, g.form, g.damage))
		return nil
	}
	if err := r.handRest(ctx); err != nil {
		return err
	}
	if g.pos < g.expected {
		r.gap(g.pos, g.expected, g.path+" has become shorter than it was")
	}
	return nil
}

func (r *reader) gap(from, to int64, why string) {
	r.log.Error("events are missing", zap.Int64("from", from), zap.Int64("to", to), zap.String("why", why))
	r.to.Gap(r.p, from, to, why)
}
