// Package file writes readings and alarms as lines of JSON, so that after any crash the
// files hold exactly the lines of an undisturbed run: a step's lines go out in one write,
// a checkpoint remembers how far the files were good, and what came after it is cut off
// before it is written again.
package file

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"

	"stillwell/online"
)

// Config says where the lines go.
type Config struct {
	Readings string // path of the readings; watches' readings go there too
	Alarms   string // path of the alarms; "" is alarms.jsonl beside Readings
	MaxBytes int64  // a file that has grown beyond is put aside at a step's end; 0: never
}

// A Sink is the two files. Not for concurrent use.
type Sink struct {
	readings, alarms *log
	buf              []byte
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
	s.alarms, errs[1] = openLog(cfg.Alarms, cfg.MaxBytes, at.Alarms)
	if err := errors.Join(errs[:]...); err != nil {
		return nil, err
	}
	return s, nil
}

// Emit writes a step.
func (s *Sink) Emit(o online.Output) error {
	b := s.buf[:0]
	var err error
	for i := range o.Readings {
		if b, err = online.AppendLine(b, &o.Readings[i]); err != nil {
			return fmt.Errorf("file sink: reading of %s/%s: %w", o.Readings[i].Study, o.Readings[i].Estimate, err)
		}
	}
	for i := range o.Watches {
		if b, err = online.AppendLine(b, &o.Watches[i]); err != nil {
			return fmt.Errorf("file sink: watch %s/%s: %w", o.Watches[i].Study, o.Watches[i].Watch, err)
		}
	}
	if err := s.readings.write(b); err != nil {
		return err
	}
	b = b[:0]
	for i := range o.Alarms {
		if b, err = online.AppendLine(b, &o.Alarms[i]); err != nil {
			return fmt.Errorf("file sink: alarm %s/%s: %w", o.Alarms[i].Study, o.Alarms[i].Watch, err)
		}
	}
	s.buf = b
	return s.alarms.write(b)
}

// Sync makes what was written durable and tells the place, for a checkpoint.
func (s *Sink) Sync() (Place, error) {
	err := errors.Join(s.readings.sync(), s.alarms.sync())
	return Place{s.readings.at, s.alarms.at}, err
}

// Close syncs and closes both files; files that nothing was written to come into being, so that
// a reader finds them.
func (s *Sink) Close() error {
	return errors.Join(s.readings.close(), s.alarms.close())
}

// log is one file of lines with those put aside before it: for readings.jsonl,
// readings-1.jsonl is the oldest.
type log struct {
	path string
	max  int64
	at   Spot
	f    *os.File // nil until something is written
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

// open brings the files back to the place at hand: files put aside since are undone, and
// lines after it cut off.
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
	if info, err := f.Stat(); err == nil && info.Size() < l.at.Size {
		_ = f.Close()
		return fmt.Errorf("file sink: %s has %d bytes where the checkpoint remembers %d; put it back, or begin with another state", l.path, info.Size(), l.at.Size)
	}
	if err := errors.Join(f.Truncate(l.at.Size), seekEnd(f)); err != nil {
		_ = f.Close()
		return fmt.Errorf("file sink: %w", err)
	}
	l.f = f
	return nil
}

func seekEnd(f *os.File) error {
	_, err := f.Seek(0, 2)
	return err
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
	if err := l.open(); err != nil {
		return err
	}
	n, err := l.f.Write(b)
	if err != nil {
		// A torn step would be read as lines: take it back.
		_ = l.f.Truncate(l.at.Size)
		_ = seekEnd(l.f)
		return fmt.Errorf("file sink: %w", err)
	}
	l.at.Size += int64(n)
	if l.max > 0 && l.at.Size >= l.max {
		return l.putAside()
	}
	return nil
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
	if l.f == nil {
		return nil
	}
	if err := l.f.Sync(); err != nil {
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
