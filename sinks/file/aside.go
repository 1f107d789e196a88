package file

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"syscall"
)

// beside is a name in the log's folder: readings-WHAT.jsonl for readings.jsonl.
func (l *log) beside(what any) string {
	ext := filepath.Ext(l.path)
	return fmt.Sprintf("%s-%v%s", strings.TrimSuffix(l.path, ext), what, ext)
}

// aside is the name of the n-th file put aside.
func (l *log) aside(n int) string { return l.beside(n) }

// rewind undoes what was put aside after the place, the youngest first, so that a crash on
// the way leaves what can be undone again.
func (l *log) rewind() error {
	first := l.at.Aside + 1
	last := first
	for exists(l.aside(last + 1)) {
		last++
	}
	if err := os.Remove(l.path); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return err
	}
	for n := last; n > first; n-- {
		if err := os.Remove(l.aside(n)); err != nil {
			return err
		}
	}
	l.undo, l.names = false, true
	return os.Rename(l.aside(first), l.path)
}

// putAway gives a file that is not ours another name, which it returns.
func (l *log) putAway(path string) (name string, err error) {
	for n := 1; ; n++ {
		name = l.beside(fmt.Sprint("before-", n))
		if !exists(name) {
			l.names = true
			return name, os.Rename(path, name)
		}
	}
}

// putAside ends the present file, and the next write begins a new one.
func (l *log) putAside() error {
	if l.ahead > 0 {
		if err := l.cut(); err != nil {
			return err
		}
	}
	if err := errors.Join(l.f.Sync(), l.f.Close()); err != nil {
		return err
	}
	l.f = nil
	if err := l.makeWay(); err != nil {
		return err
	}
	aside := l.aside(l.at.Aside + 1)
	if err := os.Rename(l.path, aside); err != nil {
		return err
	}
	l.at, l.tail, l.names, l.ours = Spot{Aside: l.at.Aside + 1}, l.tail[:0], true, false
	return nil
}

// makeWay puts away what has the name of the next file put aside; before the first, all that
// look like one, for they are another state's.
func (l *log) makeWay() error {
	if l.at.Aside > 0 {
		aside := l.aside(l.at.Aside + 1)
		if !exists(aside) {
			return nil
		}
		_, err := l.putAway(aside)
		return err
	}
	found, err := os.ReadDir(filepath.Dir(l.path))
	if err != nil {
		return err
	}
	ext := filepath.Ext(l.path)
	stem := strings.TrimSuffix(filepath.Base(l.path), ext) + "-"
	var others []int
	for _, e := range found {
		number, ok := strings.CutPrefix(strings.TrimSuffix(e.Name(), ext), stem)
		if n, err := strconv.Atoi(number); ok && err == nil && n > 0 && e.Name() == filepath.Base(l.aside(n)) {
			others = append(others, n)
		}
	}
	slices.Sort(others)
	for _, n := range others {
		if _, err := l.putAway(l.aside(n)); err != nil {
			return err
		}
	}
	return nil
}

// durable removes the files put aside that are not to be kept. The last two checkpoints can
// be restored, so what they go on writing stays.
func (l *log) durable(p Spot) error {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.saved = [2]int{l.saved[1], p.Aside}
	if l.keep == 0 {
		return nil
	}
	last := min(l.at.Aside-l.keep, l.saved[0])
	first := last
	for first > 0 && exists(l.aside(first)) {
		first--
	}
	for n := first + 1; n <= last; n++ { // the oldest first: what a crash leaves has no hole
		if err := os.Remove(l.aside(n)); err != nil {
			return fmt.Errorf("file sink: %w", err)
		}
		l.names = true
	}
	return nil
}

// syncFolder makes names durable.
func syncFolder(dir string) error {
	f, err := os.Open(dir)
	if err != nil {
		return err
	}
	err = f.Sync()
	if errors.Is(err, syscall.EINVAL) || errors.Is(err, syscall.ENOTSUP) {
		err = nil // a file system that keeps its names by other means
	}
	return errors.Join(err, f.Close())
}
