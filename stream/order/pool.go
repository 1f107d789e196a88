package order

import (
	"container/heap"
	"time"
)

// pool holds what is not settled, cut by coordinate, so that what is due can be taken
// without touching the rest. A step is cut into equal slices; a slice holds what lies
// after its start, up to and with its end.
type pool struct {
	every int64
	parts int64 // slices a step
	live  map[int64]*slice
	order indices
	last  *slice
	spare []*slice
}

type slice struct {
	index     int64
	items     []item
	malformed int64
	ahead     int64
	refs      []ref
	gaps      []lostIn
}

// lostIn is a gap of one partition.
type lostIn struct {
	p *partition
	Gap
}

// item is one event that waits.
type item struct {
	at    int64
	batch *Batch
	i     int32
	late  bool
}

// ref counts what a batch has in a slice that is not among its items.
type ref struct {
	batch *Batch
	n     int
}

func (s *pool) init(cfg Config) {
	s.every = int64(cfg.Every)
	s.live = map[int64]*slice{}
	s.parts = 1
	if cfg.Every > time.Second {
		// A quarter of the lateness keeps the buffer near its least size; a slice is not
		// worth having for less than a hundredth of a second.
		width := max(cfg.Lateness/4, 10*time.Millisecond, cfg.Every/256)
		s.parts = max(1, int64(cfg.Every/width))
	}
}

func (s *pool) indexOf(at int64) int64 {
	if at == Never {
		return Never
	}
	step := floorDiv(at-1, s.every)
	return step*s.parts + (at-1-step*s.every)*s.parts/s.every
}

// end is the last coordinate of a slice.
func (s *pool) end(index int64) int64 {
	if index == Never {
		return Never
	}
	step := floorDiv(index, s.parts)
	k := index - step*s.parts + 1
	return step*s.every + (k*s.every+s.parts-1)/s.parts
}

func (s *pool) at(at int64) *slice {
	i := s.indexOf(at)
	if s.last != nil && s.last.index == i {
		return s.last
	}
	sl, ok := s.live[i]
	if !ok {
		if n := len(s.spare); n > 0 {
			sl, s.spare = s.spare[n-1], s.spare[:n-1]
		} else {
			sl = &slice{}
		}
		sl.index = i
		s.live[i] = sl
		heap.Push(&s.order, i)
	}
	s.last = sl
	return sl
}

// first is the earliest slice, nil if there is none.
func (s *pool) first() *slice {
	if len(s.order) == 0 {
		return nil
	}
	return s.live[s.order[0]]
}

// earliest is the index of the earliest slice that has a time.
func (s *pool) earliest() (index int64, ok bool) {
	switch h := s.order; {
	case len(h) == 0 || len(h) == 1 && h[0] == Never:
		return 0, false
	case h[0] != Never:
		return h[0], true
	case len(h) == 2:
		return h[1], true
	default:
		return min(h[1], h[2]), true
	}
}

func (s *pool) drop(sl *slice) {
	heap.Pop(&s.order)
	delete(s.live, sl.index)
	if s.last == sl {
		s.last = nil
	}
	clear(sl.items)
	clear(sl.refs)
	clear(sl.gaps)
	*sl = slice{items: sl.items[:0], refs: sl.refs[:0], gaps: sl.gaps[:0]}
	s.spare = append(s.spare, sl)
}

func (sl *slice) put(it item) { sl.items = append(sl.items, it) }

func (sl *slice) refer(b *Batch) {
	b.mark.pending++
	if n := len(sl.refs); n > 0 && sl.refs[n-1].batch == b {
		sl.refs[n-1].n++
		return
	}
	sl.refs = append(sl.refs, ref{b, 1})
}

type indices []int64

func (h indices) Len() int           { return len(h) }
func (h indices) Less(i, j int) bool { return h[i] < h[j] }
func (h indices) Swap(i, j int)      { h[i], h[j] = h[j], h[i] }
func (h *indices) Push(x any)        { *h = append(*h, x.(int64)) }
func (h *indices) Pop() any {
	old := *h
	x := old[len(old)-1]
	*h = old[:len(old)-1]
	return x
}

func floorDiv(a, b int64) int64 {
	q := a / b
	if a%b < 0 {
		q--
	}
	return q
}

// miss counts an event that has no time of its own, at its partition's.
func (s *Sequencer) miss(b *Batch, at int64, count func(*slice) *int64) {
	if s.isSettled(at) {
		return // read again after a restart
	}
	sl := s.waiting.at(at)
	*count(sl)++
	sl.refer(b)
}

func malformed(sl *slice) *int64 { return &sl.malformed }
func ahead(sl *slice) *int64     { return &sl.ahead }
