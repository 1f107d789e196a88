package checkpoint

import (
	"bytes"
	"errors"
	"fmt"
	"maps"
	"slices"

	"go.uber.org/zap"
)

var (
	errClosed   = errors.New("checkpoint: the store is closed")
	errReadOnly = errors.New("checkpoint: the store was opened to look at it only")
	errNotReady = errors.New("checkpoint: load what the directory holds before committing")
)

// Commit writes the next checkpoint: the last one with the changed pages in place
// of those of the same name, without the removed ones, and with this meta. When it
// returns nil the checkpoint is durable, and the oldest that is not kept any more
// is gone. The slices are the caller's again when it returns.
//
// After an error the store stands at the checkpoint before. What was to be written
// is remembered (copied), and the next Commit writes it too unless it brings the
// same pages anew: so each change is handed over once, whatever happens. If the
// error came after the file got its name, a crash before the next Commit may still
// restore this checkpoint, whole; nothing is ever mixed. For [LostError] see there.
func (s *Store) Commit(meta []byte, changed []Page, removed []string) error {
	s.mu.Lock()
	defer s.mu.Unlock()
	switch {
	case s.closed:
		return errClosed
	case s.readOnly:
		return errReadOnly
	case !s.ready:
		return errNotReady
	}
	todo, err := overlay(s.pending, changed, removed)
	if err != nil {
		return err
	}
	if err := s.write(meta, todo); err != nil {
		s.pending = remember(todo, s.pending)
		return fmt.Errorf("checkpoint in %s: %w", s.dir, err)
	}
	s.pending = nil
	for name := range todo {
		delete(s.lost, name)
	}
	s.collect()
	s.publish()
	return nil
}

// overlay puts the changes of this commit over those that an earlier one could not write.
func overlay(pending map[string]change, changed []Page, removed []string) (map[string]change, error) {
	todo := make(map[string]change, len(pending)+len(changed)+len(removed))
	for _, p := range changed {
		switch _, twice := todo[p.Name]; {
		case twice:
			return nil, fmt.Errorf("page %q is changed twice in one commit", p.Name)
		case p.Name == "" || len(p.Name) > MaxName:
			return nil, fmt.Errorf("page name %.40q has %d bytes: 1 to %d are allowed", p.Name, len(p.Name), MaxName)
		case len(p.Data) > MaxPage:
			return nil, fmt.Errorf("page %q has %d bytes: split it, at most %d are allowed", p.Name, len(p.Data), MaxPage)
		}
		todo[p.Name] = change{data: p.Data}
	}
	for _, name := range removed {
		if c, ok := todo[name]; ok && !c.removed {
			return nil, fmt.Errorf("page %q is changed and removed in one commit", name)
		}
		todo[name] = change{removed: true}
	}
	for name, c := range pending {
		if _, newer := todo[name]; !newer {
			todo[name] = c
		}
	}
	return todo, nil
}

// remember copies the data that is the caller's; what was pending is ours already.
func remember(todo, pending map[string]change) map[string]change {
	for name, c := range todo {
		if _, ours := pending[name]; ours && sameBytes(pending[name].data, c.data) {
			continue
		}
		c.data = bytes.Clone(c.data)
		todo[name] = c
	}
	return todo
}

// sameBytes: one and the same piece of memory, not merely equal contents.
func sameBytes(a, b []byte) bool {
	return len(a) == len(b) && (len(a) == 0 || &a[0] == &b[0])
}

// write makes the next checkpoint durable and current, or changes nothing.
func (s *Store) write(meta []byte, todo map[string]change) (err error) {
	if err := s.stillLost(todo); err != nil {
		return err
	}
	m := s.successor(meta, todo)
	pending, err := s.fs.Create(fileName(m.sequence))
	if err != nil {
		return err
	}
	moved, size, err := s.fill(pending, m, todo)
	if err == nil {
		err = pending.Replace()
	}
	if err != nil {
		// What cannot be discarded now is a leftover, removed when the directory is opened again.
		return errors.Join(err, pending.Discard())
	}
	s.disk[m.sequence] = size
	if err := s.fs.SyncDir(); err != nil {
		// Its name may or may not outlive a crash. It is whole, so either is right; only
		// it must not be built on. The next commit that succeeds removes it.
		return err
	}
	if s.current != nil {
		s.held[s.current.sequence] = s.current.files()
	}
	s.current = m
	s.written += size
	s.moved += moved
	return nil
}

// successor is the manifest of the next checkpoint before any page is written: with
// the pages that stay, the checkpoints that are kept, and whether a rewriting begins.
func (s *Store) successor(meta []byte, todo map[string]change) *manifest {
	m := &manifest{sequence: s.newest() + 1, meta: bytes.Clone(meta), pages: map[string]place{}}
	last := s.current
	if last == nil {
		return m
	}
	m.pages = maps.Clone(last.pages)
	for name := range todo {
		delete(m.pages, name)
	}
	m.written = last.written + uint64(s.disk[last.sequence]-last.own())

	held := func(k uint64) bool { return s.held[k] != nil }
	whole := len(s.lost) == 0 // last can be restored
	for _, k := range last.recent {
		if held(k) {
			m.recent = append(m.recent, k)
		}
	}
	if whole {
		m.recent = append(m.recent, last.sequence)
	}
	m.recent = m.recent[max(0, len(m.recent)-(s.keep-1)):]
	if held(last.fallback) {
		m.fallback = last.fallback
	}
	if held(last.candidate) {
		m.candidate = last.candidate
	}
	if live := last.live(); whole && m.candidate == 0 &&
		(m.fallback == 0 || live <= s.small || m.written > uint64(live/2)) {
		m.candidate, m.written = last.sequence, 0
	}
	return m
}

// fill streams the file: changed pages, then pages moved from older files, then the manifest.
func (s *Store) fill(to Pending, m *manifest, todo map[string]change) (moved, size int64, err error) {
	w, err := newFileWriter(to, m.sequence, s.buffer)
	if err != nil {
		return 0, 0, err
	}
	for _, name := range slices.Sorted(maps.Keys(todo)) {
		if todo[name].removed {
			continue
		}
		if m.pages[name], err = w.page(todo[name].data); err != nil {
			return 0, 0, err
		}
	}
	m.written += uint64(w.at - headSize)
	if m.candidate != 0 {
		if moved, err = s.move(w, m, todo); err != nil {
			return 0, 0, err
		}
		if files := m.files(); len(files) == 0 || files[0] > m.candidate {
			m.fallback, m.candidate = m.candidate, 0 // nothing is shared any more
		}
	}
	if err := w.finish(m); err != nil {
		return 0, 0, err
	}
	return moved, w.at, nil
}

// move copies live pages out of the candidate's files, oldest first, as they are
// stored: as many bytes as the commit writes anyway, and at least a sixteenth of
// all, so that a rewriting ends within 16 commits.
func (s *Store) move(w *fileWriter, m *manifest, todo map[string]change) (moved int64, err error) {
	files := s.shelf()
	defer files.close()
	budget := max(w.at, m.live()/16, s.small)
	var buf []byte
	for _, p := range inOrder(m.pages, m.candidate) {
		if moved >= budget {
			break
		}
		if buf, err = files.page(p.place, buf); err != nil {
			return 0, s.audit(err, todo)
		}
		if m.pages[p.name], err = w.stored(buf, p.place); err != nil {
			return 0, err
		}
		moved += int64(p.stored)
	}
	return moved, nil
}

// audit is called when a page could not be read. If it is damaged, all pages are
// read, so that one error tells of every page that is lost, and kept checkpoints
// that need a lost page are no longer counted on.
func (s *Store) audit(cause error, todo map[string]change) error {
	if !isDamage(cause) {
		return cause
	}
	files := s.shelf()
	defer files.close()
	lost, places := map[string]error{}, map[place]bool{}
	var buf []byte
	for _, p := range inOrder(s.current.pages, s.current.sequence) {
		b, err := files.page(p.place, buf)
		switch {
		case err == nil:
			buf = b
		case isDamage(err):
			lost[p.name], places[p.place] = err, true
		default:
			return err
		}
	}
	s.lost = lost
	for _, k := range s.current.kept() {
		if s.held[k] != nil {
			s.hold(files, k, places)
		}
	}
	s.log.Error("stored pages are damaged and must be written again", zap.Int("pages", len(s.lost)), zap.Error(cause))
	if err := s.stillLost(todo); err != nil {
		return err
	}
	return cause
}

// stillLost refuses a commit that would refer to pages known to be lost.
func (s *Store) stillLost(todo map[string]change) error {
	var names []string
	for name := range s.lost {
		if _, ok := todo[name]; !ok {
			names = append(names, name)
		}
	}
	if len(names) == 0 {
		return nil
	}
	slices.Sort(names)
	return &LostError{Pages: names, Err: s.lost[names[0]]}
}

// collect removes the files that no kept checkpoint needs. What cannot be removed
// is tried again after the next Commit.
func (s *Store) collect() {
	need := map[uint64]bool{s.current.sequence: true}
	for _, f := range s.current.files() {
		need[f] = true
	}
	kept := s.current.kept()
	for k, files := range s.held {
		if !slices.Contains(kept, k) {
			delete(s.held, k)
			continue
		}
		need[k] = true
		for _, f := range files {
			need[f] = true
		}
	}
	for _, k := range slices.Sorted(maps.Keys(s.disk)) {
		if need[k] {
			continue
		}
		if err := s.fs.Remove(fileName(k)); err != nil {
			s.log.Warn("an old checkpoint file cannot be removed", zap.String("file", fileName(k)), zap.Error(err))
			continue
		}
		delete(s.disk, k)
	}
}
