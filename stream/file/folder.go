package file

import (
	"cmp"
	"context"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"

	"go.uber.org/zap"
)

// A folder finds the generations of one path: in the folder of the path and, if it
// is a symbolic link, in that of its target.
type folder struct {
	path string
	cfg  *Config
	log  *zap.Logger
}

// A relative is a file that may be a generation.
type relative struct {
	path   string
	info   fs.FileInfo
	packed bool
	stem   string // the path without what compressing adds
	tag    []int  // the numbers in what rotation added to the name; nil if it added nothing known
}

// What rotation adds to a name has digits and, between them, marks as dates have:
// behind the name, as in events.jsonl.1 and events.jsonl-20260301, or before its
// ending, as in events-2026-03-01T10.jsonl. Letters, or digits right behind the
// name, would make it another log's name.
var (
	rotationTag = regexp.MustCompile(`^[-._][0-9][-._:+TZ0-9]*$`)
	packing     = regexp.MustCompile(`\.(gz|zst)$`)
	number      = regexp.MustCompile(`[0-9]+`)
)

// A number from firstYear on begins a date.
const firstYear = 1000

// tagOf returns the numbers that rotation added to base to make name, or nil.
func tagOf(base, name string) []int {
	ext := filepath.Ext(base)
	inner := strings.TrimSuffix(base, ext)
	tag, ok := strings.CutPrefix(name, base)
	if !ok || !rotationTag.MatchString(tag) {
		if tag, ok = strings.CutPrefix(strings.TrimSuffix(name, ext), inner); !ok || !strings.HasSuffix(name, ext) || !rotationTag.MatchString(tag) {
			return nil
		}
	}
	return numbers(tag)
}

// numbers returns the numbers in a text; nil if one is beyond all bounds.
func numbers(text string) (all []int) {
	for _, digits := range number.FindAllString(text, -1) {
		n, err := strconv.Atoi(digits)
		if err != nil {
			return nil
		}
		all = append(all, n)
	}
	return all
}

// older compares by age, the older first. What was compressed may have the time at
// which that was done, so that a file not compressed may be newer although its time
// is before; then the names decide, and without them that it is not compressed.
func older(a, b relative) int {
	time := a.info.ModTime().Compare(b.info.ModTime())
	switch {
	case a.packed && !b.packed && time >= 0:
		return cmp.Or(byTag(a, b), -1)
	case b.packed && !a.packed && time <= 0:
		return cmp.Or(byTag(a, b), 1)
	}
	return cmp.Or(time, byTag(a, b), cmp.Compare(a.path, b.path))
}

// byTag compares by what rotation added to the names: dates count up, numbers count
// back from the newest. It is 0 where that does not tell.
func byTag(a, b relative) int {
	if len(a.tag) == 0 || len(b.tag) == 0 || a.tag[0] < firstYear != (b.tag[0] < firstYear) {
		return 0
	}
	if a.tag[0] < firstYear {
		a, b = b, a
	}
	return slices.Compare(a.tag, b.tag)
}

// names are the names by which rotated files are known: that of the path and, if it is
// a symbolic link, that of its target. They are looked for in the folders of both.
func (f *folder) names() (dirs []string, tag func(name string) []int) {
	dir, base := filepath.Split(f.path)
	target, err := filepath.EvalSymlinks(f.path)
	if err != nil || filepath.Base(target) == base && filepath.Dir(target) == filepath.Dir(f.path) {
		return []string{dir}, func(name string) []int { return tagOf(base, name) }
	}
	dirs = []string{dir}
	targetDir, targetBase := filepath.Split(target)
	if filepath.Clean(targetDir) != filepath.Clean(dir) {
		dirs = append(dirs, targetDir)
	}
	return dirs, func(name string) []int {
		for _, b := range []string{base, targetBase} {
			if tag := tagOf(b, name); tag != nil {
				return tag
			}
		}
		if number.ReplaceAllString(name, "0") != number.ReplaceAllString(targetBase, "0") {
			return nil
		}
		if tag := numbers(name); len(tag) > 0 && tag[0] >= firstYear { // a link to the file of the day
			return tag
		}
		return nil
	}
}

// files lists the regular files beside the path, without the one under it, the older
// first. Of a file and its compressed self, which are both there for a while, the
// file alone.
func (f *folder) files() ([]relative, error) {
	present, _ := os.Stat(f.path)
	dirs, tag := f.names()
	var found []relative
	unpacked := make(map[string]bool)
	for _, dir := range dirs {
		entries, err := os.ReadDir(cmp.Or(dir, "."))
		if err != nil {
			return nil, cannotRead(err)
		}
		for _, e := range entries {
			path := dir + e.Name()
			info, err := os.Stat(path)
			if err != nil || !info.Mode().IsRegular() || present != nil && os.SameFile(info, present) || f.cfg.reads(path) {
				continue
			}
			r := relative{path: path, info: info, stem: packing.ReplaceAllString(path, "")}
			r.tag = tag(filepath.Base(r.stem))
			if r.packed, err = packedFile(path); err != nil {
				f.passOver(r, err)
				continue
			}
			unpacked[path] = !r.packed
			found = append(found, r)
		}
	}
	found = slices.DeleteFunc(found, func(r relative) bool { return r.packed && r.stem != r.path && unpacked[r.stem] })
	slices.SortStableFunc(found, older)
	return found, nil
}

// reads reports whether path is one of those to read: then it is its own partition.
func (cfg *Config) reads(path string) bool {
	path = filepath.Clean(path)
	return slices.ContainsFunc(cfg.Paths, func(p string) bool { return filepath.Clean(p) == path })
}

func packedFile(path string) (bool, error) {
	file, err := os.Open(path)
	if err != nil {
		return false, err
	}
	defer file.Close()
	b := make([]byte, magicSize)
	n, _ := file.ReadAt(b, 0)
	form, _ := sniff(b[:n])
	return form != plain, nil
}

// passOver logs that a file could not be looked into: loudly if it may be the one looked for.
func (f *folder) passOver(r relative, err error) {
	level := zap.DebugLevel
	if r.tag != nil {
		level = zap.WarnLevel
	}
	f.log.Log(level, "a file in the folder cannot be read and is passed over", zap.String("other", r.path), zap.Error(err))
}

// recognise opens the file at path if it is the marked one; else it returns nil. A
// mark by the header alone fits every file.
func (f *folder) recognise(ctx context.Context, path string, m mark) (*generation, error) {
	g, err := openGeneration(ctx, path)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil
	}
	if err != nil {
		return nil, err
	}
	if g.regular {
		if err = g.begin(f.cfg.CSV, f.cfg.MaxLine, true, m.n); err == nil && int64(m.n) > g.start && m.matches(g.head.bytes) {
			return g, nil
		}
	}
	g.close()
	return nil, err
}

// take opens the file at path at a position, if it is the marked one and reaches
// so far; else it returns nil.
func (f *folder) take(ctx context.Context, path string, m mark, at int64) (*generation, error) {
	g, err := f.recognise(ctx, path, m)
	if g == nil {
		return nil, err
	}
	if err = g.seek(ctx, at); err == nil {
		return g, nil
	}
	g.close()
	if errors.Is(err, errTooShort) {
		err = nil
	}
	return nil, err
}

// find opens the marked file wherever it is beside the path, at a position, or
// returns nil. First it looks by inode, then among rotated files, then everywhere.
func (f *folder) find(ctx context.Context, m mark, at int64) (*generation, error) {
	files, err := f.files()
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil // not even the folder
	}
	if err != nil {
		return nil, err
	}
	rank := func(r relative) int {
		if device, inode := identity(r.info); inode != 0 && device == m.device && inode == m.inode {
			return 0
		}
		if r.tag != nil {
			return 1
		}
		return 2
	}
	slices.SortStableFunc(files, func(a, b relative) int { return cmp.Compare(rank(a), rank(b)) })
	for _, r := range files {
		g, err := f.take(ctx, r.path, m, at)
		if g != nil || ctx.Err() != nil {
			return g, ctx.Err()
		}
		if err != nil {
			f.passOver(r, err)
		}
	}
	return nil, nil
}

// after opens the generation that came after g, or returns nil if nothing is in any yet.
func (f *folder) after(ctx context.Context, g *generation) (*generation, error) {
	files, err := f.files()
	if err != nil {
		return nil, err
	}
	for _, r := range f.newer(ctx, files, g) {
		if r.info.Size() == 0 {
			continue
		}
		next, err := openGeneration(ctx, r.path)
		if errors.Is(err, fs.ErrNotExist) {
			return nil, nil // moved just now: the next look will find it
		}
		return next, err
	}
	info, err := os.Stat(f.path)
	if errors.Is(err, fs.ErrNotExist) || err == nil && (info.Size() == 0 || os.SameFile(info, g.info)) {
		return nil, nil
	}
	if err != nil {
		return nil, err
	}
	next, err := openGeneration(ctx, f.path)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil
	}
	return next, err
}

// newer returns the rotated files that came after g, the older first.
func (f *folder) newer(ctx context.Context, files []relative, g *generation) []relative {
	same := slices.IndexFunc(files, func(r relative) bool { return os.SameFile(r.info, g.info) })
	if same < 0 && g.begun {
		m := g.markTo(g.pos)
		same = slices.IndexFunc(files, func(r relative) bool {
			twin, err := f.recognise(ctx, r.path, m)
			if twin != nil {
				twin.close()
			} else if err != nil {
				f.passOver(r, err)
			}
			return twin != nil
		})
	}
	last := g.info.ModTime()
	if info, err := g.file.Stat(); err == nil {
		last = info.ModTime()
	}
	var newer []relative
	for i, r := range files {
		if r.tag != nil && (same >= 0 && i > same || same < 0 && r.info.ModTime().After(last)) {
			newer = append(newer, r)
		}
	}
	return newer
}
