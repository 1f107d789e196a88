package file

import (
	"bufio"
	"bytes"
	"context"
	"errors"
	"io"
	"io/fs"
	"os"
	"slices"
	"sync/atomic"
)

var (
	errTooEarly = errors.New("not enough of the file is there yet")
	errTooShort = errors.New("the file ends before the position")
)

// A generation is one of the files that a path names over time, open for reading:
// the present one, or one since rotated away. It begins in two steps, because a
// followed file may be there before anything is in it: openGeneration, then begin.
type generation struct {
	path    string
	file    *os.File    // nil for an io.Reader handed in
	info    fs.FileInfo // when opened; nil for an io.Reader
	regular bool        // a file, not a pipe or terminal
	id      mark        // its device and inode
	raw     io.Reader   // bytes as they lie there, metered
	meter   meter

	begun  bool
	form   form
	stop   func()    // ends decompression
	source io.Reader // content behind replay
	replay []byte    // content that begin has read already
	pos    int64     // of the next byte of content
	inLine bool      // seek went to the middle of a line
	start  int64     // of the first line that is an event
	header []byte    // CSV
	head   head

	scratch  []byte
	expected int64 // content was seen to reach up to here
	damage   error // decompression went no further
	cut      bool  // it is no longer what was read of it
	done     func()
}

// A meter counts what has been read of a file, and holds its size.
type meter struct {
	read, size atomic.Int64 // size is -1 if unknown
}

type meteredReader struct {
	io.Reader
	meter *meter
}

func (m meteredReader) Read(p []byte) (int, error) {
	n, err := m.Reader.Read(p)
	m.meter.read.Add(int64(n))
	return n, err
}

// openGeneration opens a path, which may be a pipe.
func openGeneration(ctx context.Context, path string) (*generation, error) {
	info, err := os.Stat(path)
	if err != nil {
		return nil, cannotRead(err)
	}
	if info.IsDir() {
		return nil, isFolder(path)
	}
	flag := os.O_RDONLY
	if !info.Mode().IsRegular() {
		flag = openPipe
	}
	f, err := os.OpenFile(path, flag, 0)
	if err != nil {
		return nil, cannotRead(err)
	}
	if info, err = f.Stat(); err != nil {
		f.Close()
		return nil, cannotRead(err)
	}
	g := &generation{path: path, file: f, info: info, regular: info.Mode().IsRegular(), stop: func() {}, done: func() {}}
	if !g.regular {
		g.meter.size.Store(-1)
		g.raw = bufio.NewReaderSize(meteredReader{&patient{ctx: ctx, file: f}, &g.meter}, aheadSize)
		return g, nil
	}
	g.id.device, g.id.inode = identity(info)
	g.meter.size.Store(info.Size())
	g.raw = meteredReader{f, &g.meter}
	return g, nil
}

// streamGeneration wraps an io.Reader handed in.
func streamGeneration(ctx context.Context, in io.Reader) *generation {
	r, done := interruptible(ctx, in)
	g := &generation{path: StdinName, stop: func() {}, done: done}
	g.meter.size.Store(-1)
	if f, ok := in.(*os.File); ok {
		if info, err := f.Stat(); err == nil && info.Mode().IsRegular() {
			g.meter.size.Store(info.Size())
		}
	}
	g.raw = bufio.NewReaderSize(meteredReader{r, &g.meter}, aheadSize)
	return g
}

func (g *generation) close() {
	g.stop()
	if g.file != nil {
		g.file.Close()
	}
	g.done()
}

// begin finds out the form, the header and the head, of which at least want bytes.
// Unless complete, it fails with errTooEarly if more bytes could change the
// answer, and may be called again.
func (g *generation) begin(csv bool, maxLine int, complete bool, want int) error {
	complete = complete || !g.regular // there reading waits until more is there
	magic, err := g.magic()
	if err != nil {
		return err
	}
	f, sure := sniff(magic)
	if !sure && !complete {
		return errTooEarly
	}
	if g.form = f; g.regular && f != plain {
		g.source, g.stop = unpack(f, bufio.NewReaderSize(g.raw, aheadSize), false)
	} else {
		g.source, g.stop = unpack(f, g.raw, !g.regular)
	}
	start, err := g.findStart(csv, maxLine)
	if err == nil && g.regular {
		want = max(want, start+headSize)
	}
	if err == nil {
		err = g.load(want)
	}
	if errors.Is(err, io.EOF) {
		if err = nil; !complete && start < 0 {
			err = errors.Join(errTooEarly, g.rewind())
		}
	}
	if err != nil {
		return err
	}
	if start < 0 && csv {
		start = len(g.head.bytes) // a header without newline
	}
	start = max(start, 0)
	g.replay = g.head.bytes
	g.start, g.head.limit = int64(start), start+headSize
	if csv {
		g.header = append([]byte{}, bytes.TrimRight(g.replay[:start], "\r\n")...) // never nil
	}
	g.head.bytes = bytes.Clone(g.replay[:min(len(g.replay), g.head.limit)])
	g.begun = true
	return nil
}

// magic returns the first bytes that tell the form, as many as are there.
func (g *generation) magic() ([]byte, error) {
	if g.regular {
		b := make([]byte, magicSize)
		n, err := g.file.ReadAt(b, 0)
		if errors.Is(err, io.EOF) {
			err = nil
		}
		return b[:n], err
	}
	for n := 1; ; n++ { // byte by byte: a pipe may hold less for long
		b, err := g.raw.(*bufio.Reader).Peek(n)
		if _, sure := sniff(b); sure || errors.Is(err, io.EOF) {
			return b, nil
		}
		if err != nil {
			return nil, err
		}
	}
}

// findStart returns where the first event's line starts: behind the header of a CSV
// file, which may be cut off at a little beyond maxLine, else behind a byte order
// mark. It is -1, with io.EOF, if that is not known at the end of the content.
func (g *generation) findStart(csv bool, maxLine int) (int, error) {
	for {
		b := g.head.bytes
		if csv {
			if n := bytes.IndexByte(b, '\n'); n >= 0 {
				return n + 1, nil
			}
			if len(b) > maxLine+lineSlack {
				return maxLine + lineSlack, nil
			}
		} else if bytes.HasPrefix(b, byteOrderMark) {
			return len(byteOrderMark), nil
		} else if len(b) > 0 && !bytes.HasPrefix(byteOrderMark, b) {
			return 0, nil
		}
		if err := g.load(len(b) + 1); err != nil {
			return -1, err
		}
	}
}

// load reads until the head has n bytes; io.EOF says that there are not so many.
func (g *generation) load(n int) error {
	for len(g.head.bytes) < n {
		b := append(g.head.bytes, make([]byte, max(n-len(g.head.bytes), 4<<10))...)
		m, err := g.source.Read(b[len(g.head.bytes):])
		g.head.bytes = b[:len(g.head.bytes)+m]
		if err != nil && len(g.head.bytes) < n {
			return g.verdict(err)
		}
	}
	return nil
}

// verdict turns damaged content of a file into its end, and remembers the damage.
func (g *generation) verdict(err error) error {
	var path *fs.PathError
	if g.form == plain || !g.regular || err == io.EOF || errors.As(err, &path) {
		return err
	}
	g.damage = err
	return io.EOF
}

// rewind goes back to before begin.
func (g *generation) rewind() error {
	g.stop()
	g.stop, g.source, g.replay, g.damage = func() {}, nil, nil, nil
	g.head, g.header, g.pos, g.start = head{}, nil, 0, 0
	g.meter.read.Store(0)
	_, err := g.file.Seek(0, io.SeekStart)
	return err
}

// seek goes to a position, or to the first event if that is further. It fails with
// errTooShort beyond the end.
func (g *generation) seek(ctx context.Context, to int64) error {
	to = max(to, g.start)
	before := byte('\n') // the byte before the position
	if g.form == plain && g.regular {
		info, err := g.file.Stat()
		if err != nil {
			return err
		}
		if info.Size() < to {
			return errTooShort
		}
		if to > 0 {
			b := []byte{0}
			if _, err := g.file.ReadAt(b, to-1); err != nil {
				return err
			}
			before = b[0]
		}
		if _, err := g.file.Seek(to, io.SeekStart); err != nil {
			return err
		}
		g.replay, g.pos = nil, to
		g.meter.read.Store(to)
	}
	var scratch []byte
	if g.pos < to {
		scratch = make([]byte, aheadSize)
	}
	for g.pos < to {
		if err := ctx.Err(); err != nil {
			return err
		}
		n, err := g.fill(scratch[:min(int64(len(scratch)), to-g.pos)])
		if n > 0 {
			before = scratch[n-1]
			g.keep(scratch[:n])
		}
		if err == io.EOF && g.pos < to {
			return errTooShort
		}
		if err != nil && err != io.EOF {
			return err
		}
	}
	marked := g.header == nil && to == g.start // only a byte order mark lies before
	g.inLine = before != '\n' && !marked
	return nil
}

// fill reads content at pos: all that fits, from a file; what is there, from a pipe,
// and at least something. At the end it returns io.EOF, perhaps with the last bytes.
func (g *generation) fill(b []byte) (n int, err error) {
	for n < len(b) && err == nil {
		var m int
		if len(g.replay) > 0 {
			m = copy(b[n:], g.replay)
			g.replay = g.replay[m:]
		} else {
			m, err = g.source.Read(b[n:])
		}
		n += m
		if n > 0 && !g.regular {
			break
		}
	}
	g.pos += int64(n)
	if err != nil {
		err = g.verdict(err)
	}
	return n, err
}

// keep takes what fill has read into the head. It is a call of its own because what
// is read of a file that has just been cut is not of this generation.
func (g *generation) keep(b []byte) { g.head.grow(g.pos-int64(len(b)), b) }

// markTo is the mark by what stands before a position: a copy made of a file that
// was cut later may not have what came behind.
func (g *generation) markTo(pos int64) mark {
	n := len(g.head.bytes)
	if pos > g.start {
		n = int(min(int64(n), pos))
	}
	return g.head.mark(g.id, n)
}

// whole reports whether a followed file still is what has been read of it, and has
// not been cut or written over. It also takes note of the size.
func (g *generation) whole() bool {
	info, err := g.file.Stat()
	if err != nil {
		return !g.cut // reading on will tell
	}
	size := info.Size()
	if g.form != plain {
		g.cut = g.cut || size < g.meter.size.Load()
		return !g.cut
	}
	g.scratch = slices.Grow(g.scratch[:0], len(g.head.bytes))[:len(g.head.bytes)]
	n, _ := g.file.ReadAt(g.scratch, 0)
	if g.cut = g.cut || size < g.pos || !g.head.begins(g.scratch[:n]); !g.cut {
		g.expected = max(g.expected, size)
		g.meter.size.Store(size)
	}
	return !g.cut
}
