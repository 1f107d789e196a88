package checkpoint

import (
	"cmp"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"sync/atomic"

	"go.uber.org/zap"
)

// A Store is a directory of checkpoints. Its methods may be called from several
// goroutines; they take turns, except for Stats, which never waits.
type Store struct {
	dir      string
	fs       FS
	log      *zap.Logger
	keep     int
	readOnly bool
	unlock   func() error
	small    int64 // live bytes below which every checkpoint is whole; least bytes a rewriting moves
	buffer   int   // bytes gathered for one write

	mu      sync.Mutex
	closed  bool
	ready   bool                // Load has told what there is
	current *manifest           // of the newest checkpoint; nil: none
	held    map[uint64][]uint64 // kept checkpoints but the newest: the files each needs
	disk    map[uint64]int64    // checkpoint files in the directory, with their lengths
	pending map[string]change   // what a failed Commit was to write
	lost    map[string]error    // pages that cannot be read any more
	written int64
	moved   int64

	stats atomic.Pointer[Stats]
}

// A change is what happens to one page: it gets new data, or goes.
type change struct {
	data    []byte
	removed bool
}

// Open takes the directory, which it makes if need be, for this process alone:
// while another one has it, the error wraps ErrLocked and names that process. What
// an interrupted commit left behind is removed. Load comes next, then any number
// of Commits, and Close.
func Open(dir string, opts Options) (*Store, error) {
	var unlock func() error
	if opts.FS == nil {
		if err := makeDir(dir); err != nil {
			return nil, fmt.Errorf("state directory: %w", err)
		}
		var err error
		if unlock, err = lock(dir); err != nil {
			return nil, err
		}
	}
	s, err := open(dir, opts)
	if err == nil {
		s.unlock = unlock
		err = s.removeLeftovers()
	}
	if err != nil && unlock != nil {
		err = errors.Join(err, unlock())
	}
	if err != nil {
		return nil, err
	}
	return s, nil
}

// OpenReadOnly opens a directory to look at it, also while a daemon writes to it.
// It takes no lock and changes nothing; Load may be called again and again, Commit fails.
func OpenReadOnly(dir string, opts Options) (*Store, error) {
	s, err := open(dir, opts)
	if err != nil {
		return nil, err
	}
	s.readOnly = true
	return s, nil
}

func open(dir string, opts Options) (*Store, error) {
	if err := opts.fill(dir); err != nil {
		return nil, err
	}
	s := &Store{dir: dir, fs: opts.FS, log: opts.Log, keep: opts.Keep, small: 1 << 20, buffer: 256 << 10}
	if err := s.list(); err != nil {
		return nil, err
	}
	s.publish()
	return s, nil
}

// makeDir makes dir, readable by its owner only, and its name durable.
func makeDir(dir string) error {
	if _, err := os.Stat(dir); !errors.Is(err, fs.ErrNotExist) {
		return err
	}
	if err := os.MkdirAll(dir, 0o700); err != nil {
		return err
	}
	return syncDir(filepath.Dir(filepath.Clean(dir)))
}

// list learns which checkpoint files there are.
func (s *Store) list() error {
	entries, err := s.fs.List()
	if err != nil {
		return fmt.Errorf("state directory %s: %w", s.dir, err)
	}
	s.disk = map[uint64]int64{}
	for _, e := range entries {
		if k, ok := parseName(e.Name); ok {
			s.disk[k] = e.Size
		}
	}
	return nil
}

func (s *Store) removeLeftovers() error {
	entries, err := s.fs.List()
	if err != nil {
		return fmt.Errorf("state directory %s: %w", s.dir, err)
	}
	for _, e := range entries {
		if !isLeftover(e.Name) {
			continue
		}
		if err := s.fs.Remove(e.Name); err != nil {
			return fmt.Errorf("state directory %s: leftover of an interrupted checkpoint: %w", s.dir, err)
		}
		s.log.Info("removed the leftover of an interrupted checkpoint", zap.String("file", e.Name))
	}
	return nil
}

// newest is the largest sequence in the directory, 0 if there is none.
func (s *Store) newest() uint64 {
	var k uint64
	for n := range s.disk {
		k = max(k, n)
	}
	return k
}

// Stats tells how large the state and its directory are, as of the last Load or Commit.
func (s *Store) Stats() Stats { return *s.stats.Load() }

func (s *Store) publish() {
	st := Stats{Files: len(s.disk), Written: s.written, Moved: s.moved}
	for _, size := range s.disk {
		st.FileBytes += size
	}
	if s.current != nil {
		st.Sequence, st.Pages, st.LiveBytes = s.current.sequence, len(s.current.pages), s.current.live()
	}
	s.stats.Store(&st)
}

// Close gives the directory back. It waits for a Commit under way; a second call does nothing.
func (s *Store) Close() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.closed {
		return nil
	}
	s.closed = true
	if s.unlock == nil {
		return nil
	}
	if err := s.unlock(); err != nil {
		return fmt.Errorf("unlocking state directory %s: %w", s.dir, err)
	}
	return nil
}

// A shelf keeps checkpoint files open while several pages of each are read.
type shelf struct {
	fs   FS
	open map[uint64]*source
}

func (s *Store) shelf() *shelf { return &shelf{fs: s.fs, open: map[uint64]*source{}} }

func (s *shelf) get(sequence uint64) (*source, error) {
	if src, ok := s.open[sequence]; ok {
		return src, nil
	}
	f, size, err := s.fs.Open(fileName(sequence))
	if err != nil {
		return nil, err
	}
	s.open[sequence] = &source{f, size}
	return s.open[sequence], nil
}

// page reads the stored bytes of a page; see source.page.
func (s *shelf) page(p place, buf []byte) ([]byte, error) {
	src, err := s.get(p.file)
	if err == nil {
		buf, err = src.page(p, buf)
	}
	if err != nil {
		return nil, fmt.Errorf("file %s: %w", fileName(p.file), err)
	}
	return buf, nil
}

func (s *shelf) close() {
	for _, src := range s.open {
		src.file.Close() // read only: nothing to lose
	}
}

// located is a page by its name and place.
type located struct {
	name string
	place
}

// inOrder lists the pages in files up to last by where they lie, oldest file first.
func inOrder(pages map[string]place, last uint64) []located {
	var all []located
	for name, p := range pages {
		if p.file <= last {
			all = append(all, located{name, p})
		}
	}
	slices.SortFunc(all, func(a, b located) int {
		return cmp.Or(a.before(b.place), strings.Compare(a.name, b.name))
	})
	return all
}
