package units

import (
	"fmt"
	"math"
	"slices"

	"stillwell/online/wire"
)

// A Copy is one page as it stood at a moment, to be encoded aside while the table
// goes on.
type Copy struct {
	Page   int
	page   page
	blocks [][]byte // of names; what is written there never changes
	held   []heldCopy
}

type heldCopy struct {
	row    int
	events []node
	values []float64
}

// Snapshot copies the pages that have changed since the last one, or all.
func (t *Table) Snapshot(all bool) []Copy {
	var out []Copy
	var blocks [][]byte
	for k, p := range t.pages {
		if !p.dirty && !all {
			continue
		}
		p.dirty = false
		if blocks == nil {
			blocks = slices.Clone(t.keys.blocks)
		}
		c := Copy{Page: k, blocks: blocks, page: page{heads: slices.Clone(p.heads), values: slices.Clone(p.values)}}
		for i := range p.held {
			if p.held[i].head != 0 {
				c.held = append(c.held, t.copyHeld(i, p.held[i]))
			}
		}
		out = append(out, c)
	}
	return out
}

func (t *Table) copyHeld(row int, l list) heldCopy {
	c := heldCopy{row: row}
	for id := l.head; id != 0; id = t.Held.nodes[id-1].next {
		c.events = append(c.events, t.Held.nodes[id-1])
		c.values = append(c.values, t.Held.values(id)...)
	}
	return c
}

// pageVersion is the form of an encoded page:
//
//	version, width, rows in use; each: place, state, key, hash, entry, arm, segment, flags, power, values;
//	then the rows that hold events: place, events; each: time, count, values
const pageVersion = 2

// Append encodes the page.
func (c *Copy) Append(w *wire.Writer) {
	p := &c.page
	names := keys{blocks: c.blocks}
	width := len(p.values) / pageRows
	w.U64(pageVersion)
	w.U64(uint64(width))
	n := 0
	for i := range p.heads {
		if p.heads[i].state != Free {
			n++
		}
	}
	w.U64(uint64(n))
	for i := range p.heads {
		if p.heads[i].state == Free {
			continue
		}
		w.U64(uint64(i))
		w.U8(uint8(p.heads[i].state))
		w.Bytes(names.get(p.heads[i].key))
		w.F64(math.Float64frombits(p.heads[i].hash))
		w.I64(p.heads[i].entry)
		w.U8(p.heads[i].arm)
		w.U64(uint64(p.heads[i].seg))
		w.U8(p.heads[i].flags)
		w.U8(p.heads[i].power)
		for _, v := range p.values[i*width : (i+1)*width] {
			w.F64(v)
		}
	}
	w.U64(uint64(len(c.held)))
	for _, h := range c.held {
		w.U64(uint64(h.row))
		w.U64(uint64(len(h.events)))
		k := len(h.values) / len(h.events)
		for i, e := range h.events {
			w.I64(e.time)
			w.U64(uint64(e.count))
			for _, v := range h.values[i*k : (i+1)*k] {
				w.F64(v)
			}
		}
	}
}

// Restore reads a page into an empty place of the table. Pages may come in any order;
// Finish is called after the last.
func (t *Table) Restore(at int, b []byte) error {
	const most = 1 << 22 // pages; a damaged number must not size the table
	if at < 0 || at > most {
		return fmt.Errorf("units: page %d, want 0 to %d", at, most)
	}
	r := wire.NewReader(b)
	if v := r.U64(); v != pageVersion && r.Err() == nil {
		return fmt.Errorf("units: page of version %d, want %d", v, pageVersion)
	}
	if w := r.U64(); w != uint64(t.width) && r.Err() == nil {
		return fmt.Errorf("units: page of %d values a row, want %d", w, t.width)
	}
	for len(t.pages) <= at {
		t.pages = append(t.pages, newPage(t.width, t.holds))
	}
	p := t.pages[at]
	for range r.Count(16 + 8*t.width) {
		i := t.rowIn(r)
		s := State(r.U8())
		if r.Err() != nil || p.heads[i].state != Free || s == Free || s > Past {
			r.Fail("row %d in state %d, or twice", i, s)
			break
		}
		p.heads[i].state = s
		p.heads[i].key = t.keys.put(r.Bytes())
		p.heads[i].hash = math.Float64bits(r.F64())
		p.heads[i].entry = r.I64()
		p.heads[i].arm = r.U8()
		p.heads[i].seg = uint16(r.U64())
		p.heads[i].flags = r.U8()
		p.heads[i].power = r.U8()
		for j := range t.width {
			p.values[i*t.width+j] = r.F64()
		}
	}
	t.restoreHeld(r, at, p)
	if err := r.Done(); err != nil {
		return fmt.Errorf("units: page %d: %w", at, err)
	}
	p.dirty = false
	return nil
}

func (t *Table) rowIn(r *wire.Reader) int {
	i := r.U64()
	if i >= pageRows {
		r.Fail("row %d of %d", i, pageRows)
		return 0
	}
	return int(i)
}

func (t *Table) restoreHeld(r *wire.Reader, at int, p *page) {
	vals := make([]float64, t.Held.width)
	for range r.Count(2) {
		i := t.rowIn(r)
		for range r.Count(2 + 8*t.Held.width) {
			time, count := r.I64(), r.U64()
			for j := range vals {
				vals[j] = r.F64()
			}
			if r.Err() != nil {
				return
			}
			if !t.holds || p.heads[i].state == Free || count == 0 || count > math.MaxUint32 {
				r.Fail("events held for a row that holds none")
				return
			}
			t.Hold(Row(at<<pageBits+i), time, vals, nil)
			t.Held.nodes[p.held[i].tail-1].count = uint32(count)
			t.Held.n += int(count) - 1
		}
	}
}

// Finish makes restored pages a table: it finds the free rows and indexes the others.
func (t *Table) Finish() {
	t.free, t.count, t.index = nil, [Past + 1]int{}, index{}
	for k := len(t.pages) - 1; k >= 0; k-- {
		p := t.pages[k]
		for i := pageRows - 1; i >= 0; i-- {
			r := Row(k<<pageBits + i)
			if p.heads[i].state == Free {
				t.free = append(t.free, r)
				continue
			}
			t.count[p.heads[i].state]++
			if p.heads[i].state != Past {
				t.index.put(p.heads[i].hash, r, t.hashOf)
			}
		}
	}
}
