package order

import (
	"bytes"
	"cmp"
	"slices"
)

// An Event is one that is settled and has something to say: delivered, or late. Its
// payload is the receiver's to read until the sequencer's Recycle is called.
type Event struct {
	At      int64 // its coordinate
	Late    bool
	Payload []byte
	Gap     *Gap // not an event: events are missing here; comes before what it touches
}

// Waiting is the coordinate of the earliest event that is not settled and has one, and false
// if there is none; what came before the first time of all is settled with it. It may be
// early by less than a slice.
func (s *Sequencer) Waiting() (int64, bool) {
	index, ok := s.waiting.earliest()
	if !ok {
		return 0, false
	}
	return s.waiting.end(index-1) + 1, true
}

// Release settles everything with a coordinate up to limit, which must be the end of a
// step or not before everything waiting, and hands over, in canonical order, the events
// that are delivered or late. All events up to limit must have come.
func (s *Sequencer) Release(limit int64, f func(Event)) {
	for sl := s.waiting.first(); sl != nil && s.waiting.end(sl.index) <= limit; sl = s.waiting.first() {
		s.settle(sl, f)
	}
	s.released = max(s.released, limit)
	for _, p := range s.parts {
		p.trim(s)
	}
}

// ReleaseSlices is Release for the slices that are wholly before the watermark w and up
// to limit; the step that holds them stays open. It reports whether there was any.
func (s *Sequencer) ReleaseSlices(w, limit int64, f func(Event)) bool {
	any := false
	for sl := s.waiting.first(); sl != nil; sl = s.waiting.first() {
		end := s.waiting.end(sl.index)
		if end >= w || end > limit {
			break
		}
		s.settle(sl, f)
		s.released = max(s.released, end)
		any = true
	}
	if any {
		for _, p := range s.parts {
			p.trim(s)
		}
	}
	return any
}

func (s *Sequencer) settle(sl *slice, f func(Event)) {
	s.settled.Malformed += sl.malformed
	s.settled.Ahead += sl.ahead
	s.settled.Read += sl.malformed + sl.ahead
	for i := range sl.gaps {
		g := &sl.gaps[i]
		f(Event{At: g.From, Gap: &g.Gap})
		g.p.gaps = slices.DeleteFunc(g.p.gaps, func(h Gap) bool { return h == g.Gap })
	}
	for _, r := range sl.refs {
		s.done(r.batch, r.n)
	}
	sort(sl.items)
	for _, it := range sl.items {
		e := &it.batch.events[it.i]
		s.settled.Read++
		s.unsettled--
		seen := false
		if s.cfg.IDs && e.id[1] != 0 {
			since := sub(e.max, s.cfg.Remember)
			if it.late {
				seen = s.ids.has(e.id, since)
			} else {
				seen = s.ids.seen(e.id, e.at, since, s.forget())
			}
		}
		s.done(it.batch, 1)
		switch {
		case seen:
			s.settled.Duplicate++
		case it.late:
			s.settled.Late++
			f(Event{At: it.at, Late: true, Payload: it.batch.payloadOf(e)})
		default:
			s.settled.Delivered++
			f(Event{At: it.at, Payload: it.batch.payloadOf(e)})
		}
	}
	s.waiting.drop(sl)
}

// sort brings items into canonical order: by time, then id, then partition and position.
// (That an entry comes before the other events of its unit is for those who know units.)
func sort(items []item) {
	if !slices.IsSortedFunc(items, before) {
		slices.SortFunc(items, before)
	}
}

func before(a, b item) int {
	if a.at != b.at {
		return cmp.Compare(a.at, b.at)
	}
	if a.late != b.late {
		if a.late {
			return 1
		}
		return -1
	}
	x, y := &a.batch.events[a.i], &b.batch.events[b.i]
	if c := bytes.Compare(a.batch.idOf(x), b.batch.idOf(y)); c != 0 {
		return c
	}
	if c := cmp.Compare(a.batch.Partition.Name, b.batch.Partition.Name); c != 0 {
		return c
	}
	return cmp.Compare(x.position, y.position)
}
