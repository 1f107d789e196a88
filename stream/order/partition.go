package order

import (
	"slices"
	"time"

	"stillwell/stream"
)

// partition is what the sequencer knows of one partition.
type partition struct {
	of      *stream.Partition
	name    string
	max     int64 // largest time so far; Never before the first
	floor   int64 // events up to it, from floorAt on, are late: their steps were released without them
	floorAt int64
	marks   []*mark // of batches with anything that is not settled, or with ids that may be asked for
	gaps    []Gap   // not settled
	next    stream.Position
	ended   bool
	idle    bool
	lost    bool // events are missing here; up to when, the next one will tell
}

// State is where a partition stands, for a checkpoint: where to read on so that all that
// was not settled comes again, and what is needed to judge it as before.
type State struct {
	Name    string
	At      stream.Position // where to read on
	Max     int64           // largest time before it
	Floor   int64
	FloorAt int64
	Idle    bool
	Lost    bool
	Gaps    []Gap           // known, and not settled
	Next    stream.Position // what had been read
}

// A Gap is a span of event time in which events are known to be missing.
type Gap struct{ From, To int64 }

// Gap tells that events are missing in a partition after what has come so far.
func (s *Sequencer) Gap(index int) { s.parts[index].lost = true }

// close notes how far a gap reaches, once an event after it has come: from the largest time
// before it, less the lateness, to that event's.
func (s *Sequencer) close(p *partition, to int64) {
	p.lost = false
	if p.max == Never {
		return // nothing came before: where the stream begins, nothing is missing
	}
	s.putGap(p, Gap{min(sub(p.max, s.cfg.Lateness), to), to})
}

// putGap settles a gap ahead of everything that it touches.
func (s *Sequencer) putGap(p *partition, g Gap) {
	if s.isSettled(g.To) {
		return // read again after a restart
	}
	at := g.From
	if s.isSettled(at) {
		at = s.released + 1
	}
	sl := s.waiting.at(at)
	sl.gaps = append(sl.gaps, lostIn{p, g})
	p.gaps = append(p.gaps, g)
}

// Open announces a partition; state is nil for one that is new.
func (s *Sequencer) Open(of *stream.Partition, state *State) {
	p := &partition{of: of, name: of.Name, max: Never, floor: Never}
	if state != nil {
		p.max, p.floor, p.floorAt, p.idle = state.Max, state.Floor, state.FloorAt, state.Idle
		p.next, p.lost = state.At, state.Lost
	} else {
		p.floor = s.released
	}
	for len(s.parts) <= of.Index {
		s.parts = append(s.parts, nil)
	}
	s.parts[of.Index] = p
	if state != nil {
		for _, g := range state.Gaps {
			s.putGap(p, g)
		}
	}
}

// End tells that a partition is exhausted.
func (s *Sequencer) End(index int) { s.parts[index].ended = true }

// SetIdle leaves a partition out of the watermark until its next event.
func (s *Sequencer) SetIdle(index int) { s.parts[index].idle = true }

// Idle tells whether a partition is left out.
func (s *Sequencer) Idle(index int) bool { return s.parts[index].idle }

// Ended tells whether all partitions are exhausted.
func (s *Sequencer) Ended() bool {
	for _, p := range s.parts {
		if !p.ended {
			return false
		}
	}
	return len(s.parts) > 0
}

// awake takes a partition that was left out back in: what comes for released steps is late.
func (p *partition) awake(s *Sequencer, position int64) {
	if p.idle {
		p.idle = false
		p.floor, p.floorAt = s.released, position
	}
}

// bound is the time before which an event at a position is late.
func (p *partition) bound(lateness time.Duration, position int64) int64 {
	b := sub(p.max, lateness)
	if p.floor != Never && position >= p.floorAt {
		b = max(b, p.floor+1)
	}
	return b
}

// coordinate is where what has no place of its own is settled: at the largest time of
// its partition.
func (p *partition) coordinate() int64 {
	if p.floor != Never && p.floor >= p.max {
		return p.floor + 1
	}
	return p.max
}

// trim forgets marks of batches that need not be read again.
func (p *partition) trim(s *Sequencer) {
	for len(p.marks) > 0 {
		m := p.marks[0]
		if m.pending > 0 || s.cfg.IDs && m.newest != Never && m.newest > s.forget() {
			return
		}
		p.marks = p.marks[1:]
	}
}

// States tells where each partition stands once everything up to Released is settled.
func (s *Sequencer) States() []State {
	var out []State
	for _, p := range s.parts {
		st := State{Name: p.name, At: p.next, Max: p.max, Floor: p.floor, FloorAt: p.floorAt, Idle: p.idle, Lost: p.lost, Gaps: slices.Clone(p.gaps), Next: p.next}
		if len(p.marks) > 0 {
			st.At, st.Max = p.marks[0].start, p.marks[0].before
		}
		out = append(out, st)
	}
	return out
}

// Restore sets what a checkpoint held, before any partition is opened.
func (s *Sequencer) Restore(released int64, settled Verdicts) {
	s.released, s.settled = released, settled
}

// Level closes the gates of partitions that are more than twice the lateness and a step
// ahead of the watermark, and opens the others'.
func (s *Sequencer) Level() {
	w := s.Watermark()
	for _, p := range s.parts {
		if p.ended {
			continue
		}
		if p.max != Never && (w == Never || sub(p.max, s.cfg.Lateness)-w > 2*int64(s.cfg.Lateness)+int64(s.cfg.Every)) {
			p.of.Hold()
		} else {
			p.of.Free()
		}
	}
}

// AnyIdle tells whether any partition is left out of the watermark for its silence.
func (s *Sequencer) AnyIdle() bool {
	for _, p := range s.parts {
		if p.idle {
			return true
		}
	}
	return false
}
