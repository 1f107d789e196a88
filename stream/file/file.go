// Package file reads events from files, finite or followed, and from standard
// input. Each path is a partition named by that path; standard input is "-".
//
// Content is plain, gzip or zstd, told by its first bytes and never by its name.
// Positions count bytes of the decompressed content; resuming inside a compressed
// file reads it again up to there. A byte order mark at the start is passed over.
//
// # Chunks
//
// A chunk is whole lines, in a buffer that goes back to the source by Release.
// Its Mark tells the file in which its positions count. Final is set on a last
// line without newline, at the end of a finite file or of a rotated one, and on
// a line longer than Config.MaxLine that does not fit the buffer: such a line comes
// as a chunk of its own, cut off a little beyond MaxLine, so that its reader sees
// that it is too long. What was cut off is skipped.
//
// Every chunk's Base, every line's start and every chunk's end are positions to
// resume at. At a position in the middle of a line, which is where a cut-off line's
// chunk ends, the rest of the line is skipped.
//
// # Generations
//
// The files that a path names over time are its generations. One is known by its
// device, inode and the hash of its first KiB (of what there is of it, while it is
// shorter: the mark of a young file grows with it, so marks are to be handed back and
// not compared). The hash decides; device and inode only say where to look first,
// so that a file may be copied, moved or compressed.
//
// A generation that is no longer under its path is looked for in its folder, read
// to its end, and followed by the newer ones up to the path itself. Older and
// newer is told by times of modification (see older), so keep them when you move a
// folder. Where two files could be meant the older is taken, for reading lines twice
// makes late events, which are counted, and passing over lines would go unseen.
//
// Lines that are known to be lost are reported by Receiver.Gap, and logged. Its two
// positions are equal where it is not known how much was lost.
package file

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"time"

	"go.uber.org/zap"
	"golang.org/x/sync/errgroup"

	"stillwell/stream"
)

// StdinName is the path, and the partition, of standard input.
const StdinName = "-"

const (
	defaultMaxLine   = 1 << 20
	defaultChunkSize = 512 << 10 // see BenchmarkPlain
	defaultPoll      = 100 * time.Millisecond
)

// Config says what is read. The zero value of a number stands for its default.
type Config struct {
	Paths  []string  // files, each a partition; "-" is Stdin
	Stdin  io.Reader // read to its end. When ctx is done an *os.File is left, another io.Closer closed; a Read of anything else must end by itself
	Follow bool      // read on as files grow and are rotated; does not apply to Stdin
	CSV    bool      // the first line of each generation is a header

	MaxLine   int           // bytes a line may have without its ending; default 1 MiB
	ChunkSize int           // bytes read at once; default 512 KiB
	Poll      time.Duration // between looks at a followed file's end; default 100 ms
	Log       *zap.Logger   // default: none
}

// Source reads the files of one Config. It implements stream.Source.
type Source struct {
	cfg     Config
	buffers buffers
	readers []*reader
}

var _ stream.Source = (*Source)(nil)

// New checks cfg; it opens nothing.
func New(cfg Config) (*Source, error) {
	if cfg.MaxLine < 0 || cfg.ChunkSize < 0 || cfg.Poll < 0 {
		return nil, fmt.Errorf("file: longest line %d, chunk size %d and poll interval %v, want none below 0", cfg.MaxLine, cfg.ChunkSize, cfg.Poll)
	}
	setDefault(&cfg.MaxLine, defaultMaxLine)
	setDefault(&cfg.ChunkSize, defaultChunkSize)
	setDefault(&cfg.Poll, defaultPoll)
	if cfg.Log == nil {
		cfg.Log = zap.NewNop()
	}
	seen := make(map[string]string)
	for _, path := range cfg.Paths {
		if path == "" {
			return nil, errors.New("file: a path is empty, want the name of a file")
		}
		if path == StdinName && cfg.Stdin == nil {
			return nil, fmt.Errorf("file: %q stands for standard input, which is not open here: name a file", path)
		}
		clean := filepath.Clean(path)
		if path == StdinName {
			clean = "" // and ./- is a file
		}
		if other, twice := seen[clean]; twice {
			return nil, fmt.Errorf("file: %s and %s are one file, name it once", other, path)
		}
		seen[clean] = path
	}
	if cfg.Paths = slices.Clone(cfg.Paths); cfg.Stdin != nil && !slices.Contains(cfg.Paths, StdinName) {
		cfg.Paths = append(cfg.Paths, StdinName)
	}
	if len(cfg.Paths) == 0 {
		return nil, errors.New("file: nothing to read, name at least one file, or - for standard input")
	}
	s := &Source{cfg: cfg}
	const page = 4 << 10 // reading to a page's start takes a fifth less time
	s.buffers.front = (cfg.MaxLine + lineSlack + page - 1) / page * page
	s.buffers.size = s.buffers.front + cfg.ChunkSize
	s.buffers.keep = 8 + 4*len(cfg.Paths)
	for _, path := range cfg.Paths {
		s.readers = append(s.readers, newReader(s, path))
	}
	return s, nil
}

func setDefault[T int | time.Duration](v *T, to T) {
	if *v == 0 {
		*v = to
	}
}

// Run reads every file to its end, or follows them until ctx is done. It first
// sees that all can be read, and names all that cannot, and opens all partitions
// before it reads of any, in the order of Config.Paths. It is called once.
func (s *Source) Run(ctx context.Context, to stream.Receiver) error {
	var faults []error
	for _, path := range s.cfg.Paths {
		faults = append(faults, s.cfg.readable(path))
	}
	if err := errors.Join(faults...); err != nil {
		return err
	}
	for _, r := range s.readers {
		if err := r.announce(to); err != nil {
			return err
		}
	}
	g, gctx := errgroup.WithContext(ctx)
	for _, r := range s.readers {
		g.Go(func() error { return r.run(gctx) })
	}
	err := g.Wait()
	if ctx.Err() != nil {
		return nil
	}
	return err
}

// Progress returns how many bytes have been read and how many there are, as they
// lie on the disk. total is -1 as long as it is not known, for every pipe for
// instance. It may be called at any time from any goroutine.
func (s *Source) Progress() (done, total int64) {
	for _, r := range s.readers {
		d, t := r.progress()
		done += d
		if t < 0 || total < 0 {
			total = -1
		} else {
			total += t
		}
	}
	return done, total
}

// readable says what is wrong with path before anything is read of any.
func (cfg *Config) readable(path string) error {
	if path == StdinName {
		return nil
	}
	info, err := os.Stat(path)
	switch {
	case errors.Is(err, fs.ErrNotExist) && cfg.Follow:
		return nil
	case errors.Is(err, fs.ErrNotExist):
		return fmt.Errorf("file: %w: check the path, or follow the file to wait for it", err)
	case err != nil:
		return cannotRead(err)
	case info.IsDir():
		return isFolder(path)
	case !info.Mode().IsRegular() && cfg.Follow:
		return fmt.Errorf("file: %s is a pipe or device, which cannot be followed: read it as standard input", path)
	case !info.Mode().IsRegular():
		return nil // opening a pipe and closing it again would end its writer
	}
	f, err := os.Open(path)
	if err != nil {
		return cannotRead(err)
	}
	return f.Close()
}

func cannotRead(err error) error {
	if errors.Is(err, fs.ErrPermission) {
		return fmt.Errorf("file: %w: give user %d the right to read it and to enter its folder", err, os.Getuid())
	}
	return fmt.Errorf("file: %w", err)
}

func isFolder(path string) error {
	return fmt.Errorf("file: %s is a folder: name its files, for example %s", path, filepath.Join(path, "*.jsonl"))
}
