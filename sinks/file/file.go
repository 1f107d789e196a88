// Package file writes readings and alarms as lines of JSON, so that after any crash the
// files hold exactly the lines of an undisturbed run: a step's lines go out in one write,
// a checkpoint remembers how far the files were good, and what came after it is kept as far as
// the same bytes come again, and cut off where they do not.
package file

import (
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"sync"
)

// Config says where the lines go.
type Config struct {
	Readings string // path of the readings; watches' readings go there too
	Alarms   string // path of the alarms; "" is alarms.jsonl beside Readings
	MaxBytes int64  // a file that has grown beyond is put aside at a step's end; 0: never
	Replace  bool   // what the files held before is thrown away, instead of put away
}

// A Sink is the two files. Not for concurrent use, but for Sync.
type Sink struct {
	readings, alarms *log
}

// Place is how far both files are good, for a checkpoint.
type Place struct{ Readings, Alarms Spot }

// Spot is a place in one log: the number of files put aside before, and the size of the
// present one.
type Spot struct {
	Aside int
	Size  int64
}

// Open prepares the files, without touching them before something is to be written. from
// is the checkpoint's place; nil begins them anew, and what they held is put away.
func Open(cfg Config, from *Place) (*Sink, error) {
	if cfg.Alarms == "" {
		cfg.Alarms = filepath.Join(filepath.Dir(cfg.Readings), "alarms.jsonl")
	}
	if filepath.Clean(cfg.Alarms) == filepath.Clean(cfg.Readings) {
		return nil, fmt.Errorf("file sink: readings and alarms cannot share %s", cfg.Readings)
	}
	var at Place
	if from != nil {
		at = *from
	}
	s := &Sink{}
	var errs [2]error
	s.readings, errs[0] = openLog(cfg.Readings, cfg.MaxBytes, at.Readings)
	s.alarms, errs[1] = openLog(cfg.Alarms, 0, at.Alarms)
	if err := errors.Join(errs[:]...); err != nil {
		return nil, err
	}
	s.readings.replace, s.alarms.replace = cfg.Replace, cfg.Replace
	return s, nil
}

// Place is how far the files are good now.
func (s *Sink) Place() Place { return Place{s.readings.at, s.alarms.at} }

// Sync makes what was written durable. It may run beside Emit.
func (s *Sink) Sync() error { return errors.Join(s.readings.sync(), s.alarms.sync()) }

// Close syncs and closes both files; files that nothing was written to come into being, so that
// a reader finds them.
func (s *Sink) Close() error {
	return errors.Join(s.readings.close(), s.alarms.close())
}

// log is one file of lines with those put aside before it: for readings.jsonl,
// readings-1.jsonl is the oldest.
type log struct {
	path    string
	max     int64
	replace bool

	mu    sync.Mutex // Sync runs beside the stream
	at    Spot
	f     *os.File // nil until something is written
	ahead int64    // bytes after the place, from before a crash
}

func openLog(path string, max int64, at Spot) (*log, error) {
	dir := filepath.Dir(path)
	info, err := os.Stat(dir)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		return nil, fmt.Errorf("file sink: the folder %s does not exist; make it, or name another path", dir)
	case err != nil:
		return nil, fmt.Errorf("file sink: %w", err)
	case !info.IsDir():
		return nil, fmt.Errorf("file sink: %s is not a folder", dir)
	}
	if info, err := os.Stat(path); err == nil && info.IsDir() {
		return nil, fmt.Errorf("file sink: %s is a folder, want a file", path)
	}
	return &log{path: path, max: max, at: at}, nil
}

func (l *log) aside(n int) string {
	ext := filepath.Ext(l.path)
	return fmt.Sprintf("%s-%d%s", strings.TrimSuffix(l.path, ext), n, ext)
}

// open brings the files back to the place at hand: files put aside since are undone. What
// the present one holds after the place was written before a crash, and is kept as long as the
// same bytes come again.
func (l *log) open() error {
	if l.f != nil {
		return nil
	}
	if err := l.rewind(); err != nil {
		return fmt.Errorf("file sink: %w", err)
	}
	f, err := os.OpenFile(l.path, os.O_RDWR|os.O_CREATE, 0o644)
	if err != nil {
		return fmt.Errorf("file sink: %w", err)
	}
	info, err := f.Stat()
	if err == nil && info.Size() < l.at.Size {
		err = fmt.Errorf("%s has %d bytes where the checkpoint remembers %d; put it back, or begin with another state", l.path, info.Size(), l.at.Size)
	}
	if err != nil {
		_ = f.Close()
		return fmt.Errorf("file sink: %w", err)
	}
	l.f, l.ahead = f, info.Size()-l.at.Size
	return nil
}

func (l *log) rewind() error {
	next := l.aside(l.at.Aside + 1)
	if _, err := os.Stat(next); errors.Is(err, fs.ErrNotExist) {
		return nil
	}
	if err := os.Rename(next, l.path); err != nil {
		return err
	}
	for n := l.at.Aside + 2; ; n++ {
		if err := os.Remove(l.aside(n)); errors.Is(err, fs.ErrNotExist) {
			return nil
		} else if err != nil {
			return err
		}
	}
}

func (l *log) write(b []byte) error {
	if len(b) == 0 {
		return nil
	}
	l.mu.Lock()
	defer l.mu.Unlock()
	if err := l.open(); err != nil {
		return err
	}
	same, err := l.stands(b)
	if err == nil && !same {
		if _, err = l.f.WriteAt(b, l.at.Size); err != nil {
			err = errors.Join(err, l.f.Truncate(l.at.Size)) // a torn step would be read as lines
		}
	}
	if err != nil {
		return fmt.Errorf("file sink: %w", err)
	}
	l.at.Size += int64(len(b))
	if l.max > 0 && l.at.Size >= l.max {
		return l.putAside()
	}
	return nil
}

// stands tells whether the file already holds b at the place; where it holds anything
// else, that goes.
func (l *log) stands(b []byte) (bool, error) {
	if l.ahead == 0 {
		return false, nil
	}
	if l.ahead >= int64(len(b)) {
		old := make([]byte, len(b))
		if _, err := l.f.ReadAt(old, l.at.Size); err != nil {
			return false, err
		}
		if bytes.Equal(old, b) {
			l.ahead -= int64(len(b))
			return true, nil
		}
	}
	l.ahead = 0
	if l.at == (Spot{}) && !l.replace {
		return false, l.putAway()
	}
	return false, l.f.Truncate(l.at.Size)
}

// putAway keeps what a file held that belongs to no state of ours, under another name.
func (l *log) putAway() error {
	ext := filepath.Ext(l.path)
	for n := 1; ; n++ {
		name := fmt.Sprintf("%s-before-%d%s", strings.TrimSuffix(l.path, ext), n, ext)
		if _, err := os.Lstat(name); !errors.Is(err, fs.ErrNotExist) {
			continue
		}
		if err := errors.Join(l.f.Close(), os.Rename(l.path, name)); err != nil {
			return err
		}
		f, err := os.OpenFile(l.path, os.O_RDWR|os.O_CREATE|os.O_EXCL, 0o644)
		l.f = f
		return err
	}
}

func (l *log) putAside() error {
	if err := errors.Join(l.f.Sync(), l.f.Close()); err != nil {
		return fmt.Errorf("file sink: %w", err)
	}
	l.f = nil
	if err := os.Rename(l.path, l.aside(l.at.Aside+1)); err != nil {
		return fmt.Errorf("file sink: %w", err)
	}
	l.at = Spot{Aside: l.at.Aside + 1}
	return nil
}

func (l *log) sync() error {
	l.mu.Lock()
	f := l.f
	l.mu.Unlock()
	if f == nil {
		return nil
	}
	if err := f.Sync(); err != nil && !errors.Is(err, os.ErrClosed) { // closed: put aside, and synced then
		return fmt.Errorf("file sink: %w", err)
	}
	return nil
}

func (l *log) close() error {
	if l.f == nil && l.at == (Spot{}) {
		if err := l.open(); err != nil {
			return err
		}
	}
	if l.f == nil {
		return nil
	}
	err := errors.Join(l.f.Sync(), l.f.Close())
	l.f = nil
	if err != nil {
		return fmt.Errorf("file sink: %w", err)
	}
	return nil
}
