// Package units is the table of unit rows of one shard of one study: compact
// columns, found by key through an open-addressing index. It knows keys, states,
// entry times, groups and tallies; what they mean is its caller's business.
//
// Rows stand in pages of fixed size, so that the table grows without copying and
// a checkpoint takes only the pages that changed.
package units

import (
	"bytes"
	"math"
	"unsafe"
)

// State is where a unit stands in its life.
type State uint8

const (
	Free     State = iota // no unit
	Waiting               // has not entered; events are held for it
	Open                  // entered, its follow-up runs
	Complete              // its follow-up is over
	Left                  // left the study for good
	Barred                // entered before the study began: kept out
	Past                  // complete, and its key has entered anew in another row
)

// Row is the place of a unit in its table.
type Row uint32

// None is no row.
const None = Row(math.MaxUint32)

const (
	pageBits = 9
	pageRows = 1 << pageBits
	pageMask = pageRows - 1
)

// head is what every row has: 32 bytes without a pointer, so that finding a unit and
// knowing all about it but its tallies touches one line of memory.
type head struct {
	hash  uint64
	entry int64
	key   keyRef
	seg   uint16
	arm   uint8
	state State
	flags uint8
	power uint8
}

// A page holds pageRows rows.
type page struct {
	heads  []head
	held   []list    // nil where the study holds no earlier events
	values []float64 // width a row; NaN is absent
	dirty  bool
}

// Table is the rows of one shard. The zero value is not ready; see New.
type Table struct {
	width int
	holds bool
	pages []*page
	free  []Row // free rows, reused last first
	count [Past + 1]int
	index index
	keys  keys
	Held  Held
}

// New returns an empty table whose rows have width values each; with holds, rows
// can hold earlier events of heldWidth values.
func New(width int, holds bool, heldWidth int) *Table {
	t := &Table{width: width, holds: holds}
	t.Held.width = heldWidth
	return t
}

// Len is the number of rows in use.
func (t *Table) Len() int { return len(t.pages)*pageRows - len(t.free) }

// Count is the number of rows in a state.
func (t *Table) Count(s State) int { return t.count[s] }

func (t *Table) at(r Row) (*page, int) { return t.pages[r>>pageBits], int(r & pageMask) }

// Find returns the row of a key, or None.
func (t *Table) Find(hash uint64, key []byte) Row {
	return t.index.find(hash, func(r Row) bool {
		p, i := t.at(r)
		return bytes.Equal(t.keys.get(p.heads[i].key), key)
	})
}

// Insert adds a row for a key that has none, in state s, with all values NaN.
func (t *Table) Insert(hash uint64, key []byte, s State) Row {
	if len(t.free) == 0 {
		t.grow()
	}
	r := t.free[len(t.free)-1]
	t.free = t.free[:len(t.free)-1]
	p, i := t.at(r)
	p.heads[i] = head{hash: hash, state: s, key: t.keys.put(key)}
	if t.holds {
		p.held[i] = list{}
	}
	v := p.values[i*t.width : (i+1)*t.width]
	for j := range v {
		v[j] = math.NaN()
	}
	p.dirty = true
	t.count[s]++
	t.index.put(hash, r, t.hashOf)
	return r
}

// Remove frees a row; its held events must have been freed before.
func (t *Table) Remove(r Row) {
	p, i := t.at(r)
	if p.heads[i].state != Past {
		t.index.remove(p.heads[i].hash, r, t.hashOf)
	}
	t.count[p.heads[i].state]--
	t.keys.drop(p.heads[i].key)
	p.heads[i].state, p.heads[i].key, p.heads[i].hash = Free, 0, 0
	p.dirty = true
	t.free = append(t.free, r)
	if t.keys.wasteful() {
		t.compactKeys()
	}
}

// Renew gives a complete unit's key a new row; the old one stays, as Past, found by its
// key no more. Held events go over to the new row.
func (t *Table) Renew(old Row, hash uint64, key []byte) Row {
	t.index.remove(hash, old, t.hashOf)
	t.SetState(old, Past)
	r := t.Insert(hash, key, Waiting)
	if t.holds {
		p, i := t.at(old)
		q, j := t.at(r)
		q.held[j], p.held[i] = p.held[i], list{}
	}
	return r
}

func (t *Table) hashOf(r Row) uint64 {
	p, i := t.at(r)
	return p.heads[i].hash
}

func (t *Table) grow() {
	p := newPage(t.width, t.holds)
	base := Row(len(t.pages)) << pageBits
	t.pages = append(t.pages, p)
	for i := pageRows - 1; i >= 0; i-- {
		t.free = append(t.free, base+Row(i))
	}
}

func newPage(width int, holds bool) *page {
	p := &page{heads: make([]head, pageRows), values: make([]float64, pageRows*width)}
	if holds {
		p.held = make([]list, pageRows)
	}
	return p
}

func (t *Table) compactKeys() {
	old := t.keys
	t.keys = keys{}
	for _, p := range t.pages {
		for i := range p.heads {
			if p.heads[i].state != Free {
				p.heads[i].key = t.keys.put(old.get(p.heads[i].key))
			}
		}
	}
}

// State of a row.
func (t *Table) State(r Row) State { p, i := t.at(r); return p.heads[i].state }

// SetState changes it.
func (t *Table) SetState(r Row, s State) {
	p, i := t.at(r)
	t.count[p.heads[i].state]--
	t.count[s]++
	p.heads[i].state = s
	p.dirty = true
}

// Entry is the row's entry time, Unix nanoseconds.
func (t *Table) Entry(r Row) int64 { p, i := t.at(r); return p.heads[i].entry }

// Hash of the row's key.
func (t *Table) Hash(r Row) uint64 { return t.hashOf(r) }

// Key of a row; valid until the next Insert or Remove.
func (t *Table) Key(r Row) []byte { p, i := t.at(r); return t.keys.get(p.heads[i].key) }

// Group is the row's arm and segment.
func (t *Table) Group(r Row) (arm uint8, seg uint16) {
	p, i := t.at(r)
	return p.heads[i].arm, p.heads[i].seg
}

// Flags are the caller's own bits.
func (t *Table) Flags(r Row) uint8 { p, i := t.at(r); return p.heads[i].flags }

// SetFlags sets bits.
func (t *Table) SetFlags(r Row, bits uint8) {
	p, i := t.at(r)
	p.heads[i].flags |= bits
	p.dirty = true
}

// ClearFlags clears bits.
func (t *Table) ClearFlags(r Row, bits uint8) {
	p, i := t.at(r)
	p.heads[i].flags &^= bits
	p.dirty = true
}

// Enter makes a row open, with its entry time, its group, and the power of two that is its
// weight.
func (t *Table) Enter(r Row, at int64, arm uint8, seg uint16, power uint8) {
	t.SetState(r, Open)
	p, i := t.at(r)
	h := &p.heads[i]
	h.entry, h.arm, h.seg, h.flags, h.power = at, arm, seg, 0, power
}

// Power is the power of two that is the row's weight.
func (t *Table) Power(r Row) uint8 { p, i := t.at(r); return p.heads[i].power }

// Values are the row's tallies, for reading. NaN is absent.
func (t *Table) Values(r Row) []float64 {
	p, i := t.at(r)
	return p.values[i*t.width : (i+1)*t.width]
}

// Change returns the row's tallies for writing.
func (t *Table) Change(r Row) []float64 {
	p, i := t.at(r)
	p.dirty = true
	return p.values[i*t.width : (i+1)*t.width]
}

// Each calls f for every row in use, in order of place.
func (t *Table) Each(f func(Row)) {
	for k, p := range t.pages {
		for i := range p.heads {
			if p.heads[i].state != Free {
				f(Row(k<<pageBits + i))
			}
		}
	}
}

// Cap is one more than the largest row that can be in use.
func (t *Table) Cap() int { return len(t.pages) * pageRows }

// Bytes is the memory of rows, index, keys and held events.
func (t *Table) Bytes() int64 {
	row := int(unsafe.Sizeof(head{})) + 8*t.width
	if t.holds {
		row += 8
	}
	n := len(t.pages)*pageRows*row + 8*len(t.index.words) + 4*cap(t.free)
	for _, b := range t.keys.blocks {
		n += cap(b)
	}
	return int64(n + 16*cap(t.Held.nodes) + 8*cap(t.Held.vals))
}

// Peek reads what a Find of the hash would read, and returns something made of it. Called
// for several units before they are found, it lets the processor wait for all of their
// memory at once instead of for each in turn.
func (t *Table) Peek(hash uint64) uint64 {
	if t.index.n == 0 {
		return 0
	}
	w := t.index.words[home(hash, uint64(len(t.index.words)-1))]
	if w == 0 {
		return 0
	}
	p, i := t.at(Row(w&0xffffffff) - 1)
	h := &p.heads[i]
	sum := uint64(h.entry)
	if at := uint32(h.key); at != 0 {
		at--
		sum += uint64(t.keys.blocks[at>>blockBits][at&(blockSize-1)])
	}
	if t.width > 0 {
		sum += math.Float64bits(p.values[i*t.width])
	}
	return sum
}
