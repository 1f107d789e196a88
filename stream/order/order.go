// Package order brings events into the one order in which they count, whatever order
// they came in: it gives each its verdict, holds it until nothing earlier can still
// come, removes duplicates, and knows the watermark.
//
// Every event has a coordinate, which depends on its own partition alone: its time
// if it is in time, else the largest time that its partition had reached when it came
// (malformed, ahead, late). Events are settled in order of coordinate, so that all counts
// up to a moment of event time depend on the events alone, not on how partitions
// interleave or how often the process died.
package order

import (
	"math"
	"time"
)

// Never is before all times.
const Never = int64(math.MinInt64)

// Config holds the rules of a stream.
type Config struct {
	Lateness time.Duration // how far out of order events may come
	Remember time.Duration // how long ids are remembered
	Ahead    time.Duration // how far an event may be dated after its stamp; 0: no limit
	Every    time.Duration // length of a step
	IDs      bool          // the stream has ids
}

// Verdicts count what became of the events that were read.
type Verdicts struct {
	Read      int64 `json:"read"`
	Delivered int64 `json:"delivered"`
	Malformed int64 `json:"malformed"`
	Late      int64 `json:"late"`
	Duplicate int64 `json:"duplicate"`
	Ahead     int64 `json:"ahead"`
}

// A Sequencer orders the events of all partitions. Not for concurrent use.
type Sequencer struct {
	cfg       Config
	parts     []*partition
	waiting   pool
	ids       ids
	released  int64 // everything with a coordinate up to it is settled
	settled   Verdicts
	newest    int64 // largest event time seen
	mark      int64 // the watermark so far
	furthest  Furthest
	spent     []*Batch // settled, not yet recycled
	unsettled int
}

// Furthest is the event that moved time furthest in one go.
type Furthest struct {
	Partition string
	Position  int64
	By        time.Duration
}

// New returns a sequencer that has seen nothing.
func New(cfg Config) *Sequencer {
	s := &Sequencer{cfg: cfg, released: Never, newest: Never, mark: Never}
	s.waiting.init(cfg)
	return s
}

// Settled counts the events with a coordinate up to Released.
func (s *Sequencer) Settled() Verdicts { return s.settled }

// Released is the time up to which everything is settled.
func (s *Sequencer) Released() int64 { return s.released }

// Unsettled is how many events wait to be settled.
func (s *Sequencer) Unsettled() int { return s.unsettled }

// Newest is the largest event time seen, Never if there was none.
func (s *Sequencer) Newest() int64 { return s.newest }

// Furthest is the event that moved time furthest.
func (s *Sequencer) Furthest() Furthest { return s.furthest }

// Add takes a batch; it belongs to the sequencer until it is recycled.
func (s *Sequencer) Add(b *Batch) {
	p := s.parts[b.Partition.Index]
	if len(b.events) > 0 {
		p.awake(s, b.Start.Offset)
	}
	b.mark = &mark{start: b.Start, before: p.max, newest: Never, pending: 1}
	p.marks = append(p.marks, b.mark)
	p.next = b.Next
	for i := range b.events {
		e := &b.events[i]
		e.max = p.max
		switch {
		case e.broken:
			s.miss(b, p.coordinate(), malformed)
		case s.cfg.Ahead > 0 && e.stamp != 0 && e.at-e.stamp > int64(s.cfg.Ahead):
			s.miss(b, p.coordinate(), ahead)
		case e.at < p.bound(s.cfg.Lateness, e.position):
			s.put(b, i, p.coordinate(), true)
		default:
			if p.lost {
				s.close(p, e.at)
			}
			s.move(p, e)
			b.mark.newest = max(b.mark.newest, e.at)
			s.put(b, i, e.at, false)
		}
	}
	s.done(b, 1)
	p.trim(s)
}

// move advances the partition's time to an event's: on a broker to its stamp at most,
// so that one fast clock does not make everyone else late.
func (s *Sequencer) move(p *partition, e *event) {
	to := e.at
	if e.stamp != 0 {
		to = min(to, e.stamp)
	}
	if to > p.max {
		if by := time.Duration(to - p.max); p.max != Never && by > s.furthest.By {
			s.furthest = Furthest{p.name, e.position, by}
		}
		p.max = to
	}
	e.max = p.max
	s.newest = max(s.newest, e.at)
}

func (s *Sequencer) put(b *Batch, i int, at int64, late bool) {
	if s.isSettled(at) {
		// Read again after a restart, and settled before it. Its id counts still.
		if e := &b.events[i]; !late && s.cfg.IDs && e.id[1] != 0 {
			s.ids.note(e.id, e.at, s.forget())
		}
		return
	}
	b.mark.pending++
	s.unsettled++
	s.waiting.at(at).put(item{at: at, batch: b, i: int32(i), late: late})
}

// forget is the time before which no id can be asked for again.
func (s *Sequencer) forget() int64 { return sub(s.released, s.cfg.Remember) }

func sub(t int64, d time.Duration) int64 {
	if t < math.MinInt64+int64(d) {
		return Never
	}
	return t - int64(d)
}

// done settles n events of a batch.
func (s *Sequencer) done(b *Batch, n int) {
	if b.mark.pending -= n; b.mark.pending == 0 && b.Recycle != nil {
		s.spent = append(s.spent, b)
	}
}

// Recycle gives back the batches of which everything is settled. To be called when the
// payloads handed over so far are no longer needed.
func (s *Sequencer) Recycle() {
	for i, b := range s.spent {
		s.spent[i] = nil
		b.mark = nil
		b.Recycle(b)
	}
	s.spent = s.spent[:0]
}

// isSettled tells whether a coordinate was settled before; after a restart, that what has it
// is read once more.
func (s *Sequencer) isSettled(at int64) bool { return s.released != Never && at <= s.released }

// Watermark is the least over the partitions that count of their largest time less the
// lateness; it never falls. Events before it have all come. Where no partition
// counts, because all are silent, it stays.
func (s *Sequencer) Watermark() int64 {
	w, counting, silent, ended := int64(math.MaxInt64), false, false, Never
	for _, p := range s.parts {
		switch {
		case p.ended:
			ended = max(ended, p.max)
		case p.idle:
			silent = true
		default:
			counting = true
			w = min(w, p.max)
		}
	}
	if !counting {
		w = ended
		if silent {
			w = Never
		}
	}
	s.mark = max(s.mark, sub(w, s.cfg.Lateness))
	return s.mark
}
