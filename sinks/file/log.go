package file

import (
	"bytes"
	"errors"
	"fmt"
	"hash/crc32"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"sync"
)

// log is one file of lines with those put aside before it.
type log struct {
	path    string
	max     int64
	keep    int
	replace bool

	mu    sync.Mutex // Sync and Durable run beside the stream
	at    Spot       // but for its Path, Tail and Mixed
	tail  []byte     // the last bytes before the place, tailSize of them at most
	f     *os.File   // nil until something is written
	ahead int64      // bytes behind the place, from before
	ours  bool       // they were written after the place, by this state
	undo  bool       // files put aside after the place are to be brought back
	names bool       // names have changed since the last sync of the folder
	saved [2]int     // files put aside before the last two durable places, the older first
}

// tailSize is how many bytes tell whether a file is the one that was written.
const tailSize = 256

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

func (l *log) place() Spot {
	at := l.at
	at.Path, at.Tail, at.Mixed = absolute(l.path), crc32.Checksum(l.tail, castagnoli), l.ahead > 0 && !l.ours
	return at
}

func absolute(path string) string {
	if abs, err := filepath.Abs(path); err == nil {
		return abs
	}
	return path
}

// locate finds the file in which the place lies, and changes none.
func (l *log) locate(at Spot) error {
	if err := writable(l.path); err != nil {
		return err
	}
	l.at = Spot{Aside: at.Aside, Size: at.Size}
	l.saved = [2]int{0, at.Aside}
	if l.at == (Spot{}) {
		return nil
	}
	moved := at.Path != "" && at.Path != absolute(l.path)
	aside := l.aside(at.Aside + 1)
	if at.Size == 0 && !moved {
		l.undo = exists(aside) // ours by its name alone, so what comes otherwise is put away
		return nil
	}
	if at.Size > 0 {
		if l.holds(aside, at) == nil {
			l.undo, l.ours = true, !at.Mixed
			return nil
		}
		err := l.holds(l.path, at)
		if err == nil {
			l.ours = !at.Mixed
		}
		if err == nil || !moved {
			return err
		}
	}
	l.at, l.saved = Spot{}, [2]int{} // another path is asked for
	return nil
}

func exists(path string) bool {
	_, err := os.Lstat(path)
	return !errors.Is(err, fs.ErrNotExist)
}

// holds tells whether a file is the one in which a place lies, and takes what lies around it.
func (l *log) holds(path string, at Spot) error {
	const ways = "put it back, or name another path to go on without it"
	f, err := os.Open(path)
	if errors.Is(err, fs.ErrNotExist) {
		return fmt.Errorf("file sink: %s is gone, in which the checkpoint goes on writing; %s", path, ways)
	}
	if err != nil {
		return fmt.Errorf("file sink: %w", err)
	}
	defer f.Close()
	info, err := f.Stat()
	if err != nil {
		return fmt.Errorf("file sink: %w", err)
	}
	if info.Size() < at.Size {
		return fmt.Errorf("file sink: %s has %d bytes where the checkpoint remembers %d; %s", path, info.Size(), at.Size, ways)
	}
	tail := make([]byte, min(at.Size, tailSize))
	if _, err := f.ReadAt(tail, at.Size-int64(len(tail))); err != nil {
		return fmt.Errorf("file sink: %w", err)
	}
	if at.Path != "" && crc32.Checksum(tail, castagnoli) != at.Tail {
		return fmt.Errorf("file sink: %s is not the file that the checkpoint goes on writing: its bytes before %d are others; %s", path, at.Size, ways)
	}
	l.tail, l.ahead = tail, info.Size()-at.Size
	return nil
}

// open brings the files back to the place at hand. What the present one holds behind the
// place is kept as long as the same bytes come again.
func (l *log) open() error {
	if l.f != nil {
		return nil
	}
	if l.undo {
		if err := l.rewind(); err != nil {
			return fmt.Errorf("file sink: %w", err)
		}
	}
	isNew := !exists(l.path)
	f, err := os.OpenFile(l.path, os.O_RDWR|os.O_CREATE, 0o644)
	if err != nil {
		return notWritable(err)
	}
	info, err := f.Stat()
	if err == nil && info.Size() < l.at.Size { // cut since it was looked at
		err = fmt.Errorf("%s has %d bytes where %d were written", l.path, info.Size(), l.at.Size)
	}
	if err != nil {
		_ = f.Close()
		return fmt.Errorf("file sink: %w", err)
	}
	l.f, l.ahead = f, info.Size()-l.at.Size
	l.names = l.names || isNew
	return nil
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
	n, err := l.stands(b)
	if err == nil && n < len(b) {
		if _, err = l.f.WriteAt(b[n:], l.at.Size+int64(n)); err != nil {
			err = errors.Join(err, l.f.Truncate(l.at.Size)) // a torn step would be read as lines
		}
	}
	if err != nil {
		return failed(err)
	}
	l.at.Size += int64(len(b))
	l.tail = append(l.tail, b[max(0, len(b)-tailSize):]...)
	l.tail = append(l.tail[:0], l.tail[max(0, len(l.tail)-tailSize):]...)
	if l.max > 0 && l.at.Size >= l.max {
		if err := l.putAside(); err != nil {
			return failed(err)
		}
	}
	return nil
}

// stands tells how many bytes of b the file already holds at the place; where it holds
// anything else, that goes.
func (l *log) stands(b []byte) (int, error) {
	if l.ahead == 0 {
		return 0, nil
	}
	old := make([]byte, min(l.ahead, int64(len(b))))
	if _, err := l.f.ReadAt(old, l.at.Size); err != nil {
		return 0, err
	}
	if bytes.HasPrefix(b, old) {
		l.ahead -= int64(len(old))
		return len(old), nil
	}
	return 0, l.cut()
}

// cut ends the file at the place. What is not ours stays, under another name.
func (l *log) cut() error {
	l.ahead = 0
	if l.ours || l.replace {
		return l.f.Truncate(l.at.Size)
	}
	if err := l.f.Close(); err != nil {
		return err
	}
	l.f = nil
	before, err := l.putAway(l.path)
	if err != nil {
		return err
	}
	from, err := os.Open(before)
	if err != nil {
		return err
	}
	defer from.Close()
	if l.f, err = os.OpenFile(l.path, os.O_RDWR|os.O_CREATE|os.O_EXCL, 0o644); err != nil {
		return err
	}
	_, err = io.CopyN(l.f, from, l.at.Size)
	return err
}

func (l *log) sync() error {
	l.mu.Lock()
	f, names := l.f, l.names
	l.names = false
	l.mu.Unlock()
	var errs [2]error
	if f != nil {
		if errs[0] = f.Sync(); errors.Is(errs[0], os.ErrClosed) {
			errs[0] = nil // put aside meanwhile, and synced then
		}
	}
	if names {
		if errs[1] = syncFolder(filepath.Dir(l.path)); errs[1] != nil {
			l.mu.Lock()
			l.names = true
			l.mu.Unlock()
		}
	}
	if err := errors.Join(errs[:]...); err != nil {
		return fmt.Errorf("file sink: %w", err)
	}
	return nil
}

func (l *log) end() error {
	l.mu.Lock()
	defer l.mu.Unlock()
	if err := l.open(); err != nil {
		return err
	}
	if l.ahead == 0 {
		return nil
	}
	if err := l.cut(); err != nil {
		return fmt.Errorf("file sink: %w", err)
	}
	return nil
}

func (l *log) close() error {
	if l.f == nil && !exists(l.path) {
		if err := l.open(); err != nil {
			return err
		}
	}
	if l.f == nil {
		return nil
	}
	err := l.sync()
	err = errors.Join(err, l.f.Close())
	l.f = nil
	return err
}
