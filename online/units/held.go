package units

import "math"

// list is a chain of held events, in order of time; 0 is none.
type list struct{ head, tail uint32 }

// Held keeps events of units that have not entered, until they enter or the event
// is too old to count: one node an event, in one slab with a free chain.
type Held struct {
	width int
	nodes []node
	vals  []float64 // width a node; NaN: not tallied
	free  uint32
	n     int
}

type node struct {
	time  int64
	next  uint32
	count uint32 // events that the node stands for
}

// Len is the number of events held.
func (h *Held) Len() int { return h.n }

// Hold appends an event of a row, with its values (NaN where it tallies nothing).
// Times must not fall. With fold, an event of the same time as the last one is added to
// it by f instead of taking a node of its own.
func (t *Table) Hold(r Row, at int64, vals []float64, fold func(dst, src []float64)) {
	h := &t.Held
	p, i := t.at(r)
	l := &p.held[i]
	p.dirty = true
	h.n++
	if fold != nil && l.tail != 0 && h.nodes[l.tail-1].time == at {
		fold(h.values(l.tail), vals)
		h.nodes[l.tail-1].count++
		return
	}
	if h.free == 0 {
		h.nodes = append(h.nodes, node{})
		for range h.width {
			h.vals = append(h.vals, math.NaN())
		}
		h.free = uint32(len(h.nodes))
	}
	id := h.free
	h.free = h.nodes[id-1].next
	h.nodes[id-1] = node{time: at, count: 1}
	copy(h.values(id), vals)
	if l.tail != 0 {
		h.nodes[l.tail-1].next = id
	} else {
		l.head = id
	}
	l.tail = id
}

func (h *Held) values(id uint32) []float64 {
	return h.vals[int(id-1)*h.width : int(id)*h.width]
}

// Holds tells whether a row holds events, and the time of the first.
func (t *Table) Holds(r Row) (first int64, ok bool) {
	p, i := t.at(r)
	if p.held == nil || p.held[i].head == 0 {
		return 0, false
	}
	return t.Held.nodes[p.held[i].head-1].time, true
}

// Take hands over a row's held events, first to last, while f wants them, and frees
// those taken. f returns false to leave its event and the rest.
func (t *Table) Take(r Row, f func(at int64, vals []float64, count int) bool) {
	h := &t.Held
	p, i := t.at(r)
	l := &p.held[i]
	for l.head != 0 {
		nd := &h.nodes[l.head-1]
		if !f(nd.time, h.values(l.head), int(nd.count)) {
			return
		}
		h.n -= int(nd.count)
		next := nd.next
		*nd = node{next: h.free}
		h.free = l.head
		l.head = next
		p.dirty = true
	}
	l.tail = 0
}
