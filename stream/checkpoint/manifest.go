package checkpoint

import (
	"cmp"
	"fmt"
	"maps"
	"math"
	"slices"

	"stillwell/online/wire"
)

// A manifest is the table of contents of one checkpoint. Once written it does not
// change any more; the next one begins as a clone.
type manifest struct {
	sequence  uint64
	fallback  uint64   // 0: none
	candidate uint64   // 0: no rewriting under way
	recent    []uint64 // ascending
	written   uint64   // since the last rewriting began, but for what it moved and this manifest
	meta      []byte
	pages     map[string]place
}

// A place says where the bytes of a page lie.
type place struct {
	file           uint64 // sequence of the checkpoint that wrote it
	offset         int64
	stored, length int // stored < length: an S2 block
	check          uint32
}

func (p place) before(q place) int {
	return cmp.Or(cmp.Compare(p.file, q.file), cmp.Compare(p.offset, q.offset), cmp.Compare(p.stored, q.stored))
}

// files lists the files with live pages, ascending.
func (m *manifest) files() []uint64 {
	seen := map[uint64]bool{}
	for _, p := range m.pages {
		seen[p.file] = true
	}
	return slices.Sorted(maps.Keys(seen))
}

// live is the number of stored bytes of all pages.
func (m *manifest) live() int64 {
	var n int64
	for _, p := range m.pages {
		n += int64(p.stored)
	}
	return n
}

// own is the number of stored bytes of the pages that m's own file holds.
func (m *manifest) own() int64 {
	var n int64
	for _, p := range m.pages {
		if p.file == m.sequence {
			n += int64(p.stored)
		}
	}
	return n
}

// kept lists the checkpoints that stay restorable beside m itself.
func (m *manifest) kept() []uint64 {
	all := append(slices.Clone(m.recent), m.fallback, m.candidate)
	slices.Sort(all)
	return slices.DeleteFunc(slices.Compact(all), func(k uint64) bool { return k == 0 || k == m.sequence })
}

func (m *manifest) encode(w *wire.Writer) {
	w.U64(m.sequence)
	w.U64(m.fallback)
	w.U64(m.candidate)
	w.U64(uint64(len(m.recent)))
	for _, k := range m.recent {
		w.U64(k)
	}
	w.U64(m.written)
	w.Bytes(m.meta)

	files := m.files()
	index := make(map[uint64]int, len(files))
	w.U64(uint64(len(files)))
	last := uint64(0)
	for i, k := range files {
		w.U64(k - last)
		index[k], last = i, k
	}

	w.U64(uint64(len(m.pages)))
	before := ""
	for _, name := range slices.Sorted(maps.Keys(m.pages)) {
		p, n := m.pages[name], shared(before, name)
		w.U64(uint64(n))
		w.String(name[n:])
		w.U64(uint64(index[p.file]))
		w.U64(uint64(p.offset))
		w.U64(uint64(p.stored))
		w.U64(uint64(p.length - p.stored))
		w.U64(uint64(p.check))
		before = name
	}
}

// shared is the number of leading bytes that a and b have in common.
func shared(a, b string) int {
	n := 0
	for n < min(len(a), len(b)) && a[n] == b[n] {
		n++
	}
	return n
}

// decodeManifest accepts what encode writes and nothing else, so that a manifest
// has one form only.
func decodeManifest(b []byte) (*manifest, error) {
	r := wire.NewReader(b)
	m := &manifest{sequence: r.U64(), fallback: r.U64(), candidate: r.U64()}
	if m.sequence == 0 {
		r.Fail("a checkpoint has no sequence")
	}
	for range r.Count(1) {
		k := r.U64()
		if k == 0 || k >= m.sequence || len(m.recent) > 0 && k <= m.recent[len(m.recent)-1] {
			r.Fail("recent checkpoint %d of checkpoint %d is out of order", k, m.sequence)
		}
		m.recent = append(m.recent, k)
	}
	if max(m.fallback, m.candidate) >= m.sequence {
		r.Fail("checkpoint %d falls back on %d and %d, which are not older", m.sequence, m.fallback, m.candidate)
	}
	m.written = r.U64()
	m.meta = slices.Clone(r.Bytes())

	files := make([]uint64, r.Count(1))
	used := make([]bool, len(files))
	last := uint64(0)
	for i := range files {
		step := r.U64()
		if step == 0 || step > m.sequence-last {
			r.Fail("file list of checkpoint %d is out of order", m.sequence)
			break
		}
		last += step
		files[i] = last
	}
	decodePages(r, m, files, used)
	if i := slices.Index(used, false); i >= 0 && r.Err() == nil {
		r.Fail("no page lies in file %d", files[i])
	}
	return m, r.Done()
}

func decodePages(r *wire.Reader, m *manifest, files []uint64, used []bool) {
	const least = 7 // bytes a page takes in the manifest
	n := r.Count(least)
	m.pages = make(map[string]place, n)
	before := ""
	for range n {
		keep, rest := r.U64(), r.Bytes()
		file, offset, stored, saved, check := r.U64(), r.U64(), r.U64(), r.U64(), r.U64()
		if r.Err() != nil {
			return
		}
		if keep > uint64(len(before)) || int(keep)+len(rest) > MaxName {
			r.Fail("a page's name of %d and %d bytes follows one of %d", keep, len(rest), len(before))
			return
		}
		name := before[:keep] + string(rest)
		switch {
		case name <= before || shared(before, name) != int(keep):
			r.Fail("page names %q and %q are out of order", before, name)
		case file >= uint64(len(files)):
			r.Fail("page %q lies in file %d of %d", name, file, len(files))
		case offset < headSize || offset > math.MaxInt64-MaxPage || stored > MaxPage || saved > MaxPage-stored:
			r.Fail("page %q of %d+%d bytes at %d cannot be", name, stored, saved, offset)
		case check > math.MaxUint32:
			r.Fail("page %q has a checksum of more than 32 bits", name)
		default:
			used[file] = true
			m.pages[name] = place{files[file], int64(offset), int(stored), int(stored + saved), uint32(check)}
			before = name
			continue
		}
		return
	}
}

// tiles checks that the pages the checkpoint wrote itself fill its file between
// header and manifest, so that every byte of it is under a checksum.
func (m *manifest) tiles(end int64) error {
	var own []place
	for _, p := range m.pages {
		if p.file == m.sequence {
			own = append(own, p)
		}
	}
	slices.SortFunc(own, place.before)
	at := int64(headSize)
	for _, p := range own {
		if p.offset != at {
			return fmt.Errorf("%w: pages do not follow one another at byte %d", ErrDamaged, at)
		}
		at += int64(p.stored)
	}
	if at != end {
		return fmt.Errorf("%w: pages end at byte %d, the manifest begins at %d", ErrDamaged, at, end)
	}
	return nil
}
