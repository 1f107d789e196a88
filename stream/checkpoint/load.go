package checkpoint

import (
	"errors"
	"fmt"
	"io/fs"
	"maps"
	"slices"
	"syscall"

	"go.uber.org/zap"
)

// Load restores the newest checkpoint that is intact, every byte of it checked. It
// returns nil if the directory holds none at all. Newer ones that are damaged are
// in Skipped, and logged as errors; if all are damaged, Load fails, for going on
// from nothing would not be a restoration. So it does if a file cannot be read for
// another reason (rights, too many open files) or has a newer format.
//
// A Store that writes loads once, before its first Commit.
func (s *Store) Load() (*Snapshot, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	switch {
	case s.closed:
		return nil, errClosed
	case s.ready && !s.readOnly:
		return nil, errors.New("checkpoint: this store has been loaded already")
	}
	snap, m, err := s.restore()
	for tries := 1; s.readOnly && tries < 10 && (err != nil || m != nil && len(snap.Skipped) > 0); tries++ {
		// Files may be missing because the daemon went on meanwhile: look again.
		newest := s.newest()
		if err := s.list(); err != nil {
			return nil, err
		}
		if s.newest() == newest {
			break
		}
		snap, m, err = s.restore()
	}
	if err != nil {
		return nil, err
	}
	s.adopt(m)
	if m == nil {
		return nil, nil
	}
	for _, err := range snap.Skipped {
		s.log.Error("damaged checkpoint skipped for an older one", zap.Uint64("restored", snap.Sequence), zap.Error(err))
	}
	return snap, nil
}

// restore tries the checkpoints from the newest to the oldest. The manifest is nil
// if there are none.
func (s *Store) restore() (*Snapshot, *manifest, error) {
	if err := s.list(); err != nil {
		return nil, nil, err
	}
	all := slices.Sorted(maps.Keys(s.disk))
	slices.Reverse(all)
	files := s.shelf()
	defer files.close()

	snap := &Snapshot{}
	bad := map[place]error{}
	var kept []uint64 // by the newest manifest that could be read
	known := false
	for _, k := range all {
		expected := !known || slices.Contains(kept, k)
		m, err := s.manifest(files, k)
		if err == nil {
			if !known {
				known, kept = true, m.kept()
			}
			if err = s.pages(files, m, snap, bad); err == nil {
				return snap, m, nil
			}
		}
		err = fmt.Errorf("checkpoint %d in %s: %w", k, s.dir, err)
		switch {
		case !isDamage(err):
			return nil, nil, err
		case expected: // else it was given up long ago, and its file only serves others with its pages
			snap.Skipped = append(snap.Skipped, err)
		}
	}
	if len(all) == 0 {
		return nil, nil, nil
	}
	return nil, nil, fmt.Errorf("none of the %d checkpoints in %s is intact: put back a copy of the directory, or move it away "+
		"to begin anew, from where the stream begins; the newest: %w", len(all), s.dir, snap.Skipped[0])
}

// isDamage tells damage, which the checkpoint before may not share, from trouble
// that says nothing about the stored bytes.
func isDamage(err error) bool {
	return errors.Is(err, ErrDamaged) || errors.Is(err, fs.ErrNotExist) || errors.Is(err, syscall.EIO)
}

func (s *Store) manifest(files *shelf, sequence uint64) (*manifest, error) {
	src, err := files.get(sequence)
	if err != nil {
		return nil, err
	}
	return src.manifest(sequence)
}

// pages fills snap with the pages of m. Places found bad once are not tried again:
// checkpoints share what did not change.
func (s *Store) pages(files *shelf, m *manifest, snap *Snapshot, bad map[place]error) error {
	for name, p := range m.pages {
		if err := bad[p]; err != nil {
			return fmt.Errorf("page %q: %w", name, err)
		}
	}
	// All files before any page, so that a daemon that goes on takes nothing away from us.
	for _, k := range m.files() {
		if _, err := files.get(k); err != nil {
			return err
		}
	}
	pages := make(map[string][]byte, len(m.pages))
	var buf []byte
	for _, p := range inOrder(m.pages, m.sequence) {
		stored, err := files.page(p.place, buf)
		var data []byte
		if err == nil {
			buf = stored
			data, err = p.expand(stored)
		}
		if err != nil {
			bad[p.place] = err
			return fmt.Errorf("page %q: %w", p.name, err)
		}
		pages[p.name] = data
	}
	snap.Sequence, snap.Meta, snap.Pages = m.sequence, slices.Clone(m.meta), pages
	return nil
}

// adopt goes on from m, nil for none. Checkpoints that m wanted kept and that are
// not there any more are forgotten; without a fallback the next Commit begins to make one.
func (s *Store) adopt(m *manifest) {
	s.ready, s.current, s.held = true, m, map[uint64][]uint64{}
	if m != nil && !s.readOnly {
		files := s.shelf()
		defer files.close()
		for _, k := range m.kept() {
			s.hold(files, k, nil)
		}
	}
	s.publish()
}

// hold notes which files a kept checkpoint needs, or with a warning that it can no
// longer be restored: its manifest is damaged, a file is gone, or a page is lost.
func (s *Store) hold(files *shelf, k uint64, lost map[place]bool) {
	delete(s.held, k)
	m, err := s.manifest(files, k)
	if err == nil {
		for name, p := range m.pages {
			if _, ok := s.disk[p.file]; !ok {
				err = fmt.Errorf("file %s: %w", fileName(p.file), fs.ErrNotExist)
			} else if lost[p] {
				err = fmt.Errorf("page %q: %w", name, ErrDamaged)
			}
		}
	}
	if err != nil {
		s.log.Warn("an older checkpoint can no longer be restored", zap.Uint64("checkpoint", k), zap.Error(err))
		return
	}
	s.held[k] = m.files()
}
