package units

import (
	"fmt"
	"math"
	"slices"

	"stillwell/online/wire"
)

// Marks remember units whose rows are gone, by hash alone, with a note and until a time that
// each has: 16 bytes a unit and its place in the index. The note stands in the hash's low bits,
// which tell next to nothing among the units of a shard. They stand in pages in the order in which they
// were put, and pages go as a whole, so that a checkpoint takes only the last ones. The
// zero value is empty and ready.
//
// A mark whose time has come is void, and of two of one hash the later counts.
type Marks struct {
	pages []*markPage // nil once void
	first int         // pages before it are void
	told  int         // pages before it were void at the last snapshot
	index index
}

type markPage struct {
	marks []mark
	dirty bool
}

type mark struct {
	word  uint64 // hash, its lowest byte the note
	until int64
}

const noteBits = 8

func hashOnly(word uint64) uint64 { return word >> noteBits << noteBits }

// Len is the number of marks, void ones that are still kept among them.
func (m *Marks) Len() int { return m.index.n }

// Bytes is the memory of the marks and their index.
func (m *Marks) Bytes() int64 {
	n := 8 * (len(m.index.words) + len(m.pages))
	for _, p := range m.pages[m.first:] {
		n += 16 * cap(p.marks)
	}
	return int64(n)
}

// Find returns until when a unit is marked, and the note.
func (m *Marks) Find(hash uint64) (note uint8, until int64, ok bool) {
	r := m.find(hashOnly(hash))
	if r == None {
		return 0, 0, false
	}
	k := m.at(r)
	return uint8(k.word), k.until, true
}

func (m *Marks) find(hash uint64) Row {
	return m.index.find(hash, func(r Row) bool { return m.hashOf(r) == hash })
}

func (m *Marks) at(r Row) *mark { return &m.pages[r>>pageBits].marks[r&pageMask] }

func (m *Marks) hashOf(r Row) uint64 { return hashOnly(m.at(r).word) }

// Put marks a unit.
func (m *Marks) Put(hash uint64, note uint8, until int64) {
	hash = hashOnly(hash)
	if old := m.find(hash); old != None {
		m.index.remove(hash, old, m.hashOf)
	}
	last := len(m.pages) - 1
	if last < 0 || m.pages[last] == nil || len(m.pages[last].marks) == pageRows {
		m.pages = append(m.pages, &markPage{})
		last++
	}
	p := m.pages[last]
	p.marks = append(p.marks, mark{hash | uint64(note), until})
	p.dirty = true
	m.index.put(hash, Row(last<<pageBits+len(p.marks)-1), m.hashOf)
}

// Expire lets the oldest pages go in which all marks are void at now. Times that rise from
// mark to mark leave little else behind; the page still being filled stays.
func (m *Marks) Expire(now int64) {
	for m.first < len(m.pages)-1 {
		p := m.pages[m.first]
		if slices.ContainsFunc(p.marks, func(k mark) bool { return k.until > now }) {
			return
		}
		for i, k := range p.marks {
			if r, hash := Row(m.first<<pageBits+i), hashOnly(k.word); m.find(hash) == r {
				m.index.remove(hash, r, m.hashOf)
			}
		}
		m.pages[m.first] = nil
		m.first++
	}
}

// A MarksCopy is one page of marks as it stood at a moment.
type MarksCopy struct {
	Page  int
	marks []mark
}

// Snapshot copies the pages that have changed since the last one, or all; those that have
// gone since are empty.
func (m *Marks) Snapshot(all bool) (out []MarksCopy) {
	for ; m.told < m.first; m.told++ {
		out = append(out, MarksCopy{Page: m.told})
	}
	for k, p := range m.pages[m.first:] {
		if p.dirty || all {
			p.dirty = false
			out = append(out, MarksCopy{Page: m.first + k, marks: slices.Clone(p.marks)})
		}
	}
	return out
}

// marksVersion is the form of an encoded page: version, marks; each: hash with note, time.
const marksVersion = 1

// Append encodes the page.
func (c *MarksCopy) Append(w *wire.Writer) {
	w.U64(marksVersion)
	w.U64(uint64(len(c.marks)))
	for _, k := range c.marks {
		w.F64(math.Float64frombits(k.word))
		w.I64(k.until)
	}
}

// Restore reads a page. Pages come in ascending order.
func (m *Marks) Restore(at int, b []byte) error {
	const most = 1 << 22
	if at < len(m.pages) || at > most {
		return fmt.Errorf("units: page %d of marks, want one from %d to %d", at, len(m.pages), most)
	}
	r := wire.NewReader(b)
	if v := r.U64(); v != marksVersion {
		r.Fail("version %d, want %d", v, marksVersion)
	}
	n := r.Count(9)
	if n > pageRows {
		r.Fail("%d marks, at most %d", n, pageRows)
	}
	p := &markPage{}
	for range n {
		k := mark{math.Float64bits(r.F64()), r.I64()}
		if r.Err() != nil {
			break
		}
		p.marks = append(p.marks, k)
	}
	if err := r.Done(); err != nil {
		return fmt.Errorf("units: page %d of marks: %w", at, err)
	}
	for len(m.pages) < at {
		m.pages = append(m.pages, &markPage{}) // void
	}
	m.pages = append(m.pages, p)
	if len(p.marks) == 0 && m.first == at {
		m.first, m.told = at+1, at+1
	}
	for i, k := range p.marks {
		hash := hashOnly(k.word)
		if old := m.find(hash); old != None {
			m.index.remove(hash, old, m.hashOf)
		}
		m.index.put(hash, Row(at<<pageBits+i), m.hashOf)
	}
	return nil
}
