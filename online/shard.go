package online

import (
	"fmt"

	"stillwell/online/units"
)

// A Shard follows one of the slices of the units of every study. It is a state
// machine: the same touches at the same times, with the same Ends between them, leave
// the same bytes. Not for concurrent use; different shards share nothing.
type Shard struct {
	plan  *Plan
	index int
	parts []*part
}

// NewShard returns shard index of a compiled plan, with no unit in it.
func NewShard(p *Plan, index int) *Shard {
	sh := &Shard{plan: p, index: index}
	for i := range p.Studies {
		sh.parts = append(sh.parts, newPart(&p.Studies[i], p.Limits))
	}
	return sh
}

// Begin tells the time of the stream's earliest delivered event, before the first Apply. A
// study that has begun already takes no notice.
func (sh *Shard) Begin(at int64) {
	for _, p := range sh.parts {
		p.begin(at)
	}
}

// Apply folds in what one delivered event means to one unit. Times never fall, and a
// unit's touches of equal time come in canonical order, its entry first.
func (sh *Shard) Apply(at int64, t Touch) {
	sh.parts[t.Study()].apply(at, t)
}

// ApplyLate notes an event that came too late to count: that a unit had one is evidence
// of its own, by arm.
func (sh *Shard) ApplyLate(at int64, t Touch) { sh.parts[t.Study()].applyLate(at, t) }

// Due is the earliest time at which a unit of this shard becomes complete, and false
// if none will without further events.
func (sh *Shard) Due() (at int64, ok bool) {
	for _, p := range sh.parts {
		if d, has := p.due(); has && (!ok || d < at) {
			at, ok = d, true
		}
	}
	return at, ok
}

// Stirred is the time of the first event applied since the last End, and false if there was
// none: its step has something to say, whether or not further events come.
func (sh *Shard) Stirred() (at int64, ok bool) {
	for _, p := range sh.parts {
		if p.stirred != NoTime && (!ok || p.stirred < at) {
			at, ok = p.stirred, true
		}
	}
	return at, ok
}

// End closes a step at time T, when every event up to T has been applied but for those
// of keyed units and buckets at T itself: it hands over the units complete at or
// before T, and what changed in the provisional sums. The summary is valid until the next End.
func (sh *Shard) End(T int64) Summary {
	sum := Summary{Shard: sh.index}
	for _, p := range sh.parts {
		sum.Parts = append(sum.Parts, p.end(T))
	}
	return sum
}

// Finish tells that no further event will come: what is held for units that have not
// entered falls outside.
func (sh *Shard) Finish() {
	for _, p := range sh.parts {
		p.expireAll()
	}
}

// Outcomes adds up what became of the touches of a study.
func (sh *Shard) Outcomes(study int) Outcomes { return sh.parts[study].outcomes() }

func (sh *Shard) String() string { return fmt.Sprintf("shard %d of %d", sh.index, Shards) }

// A Summary is what a shard hands the desk at a step.
type Summary struct {
	Shard int
	Parts []PartSummary // by study
}

// A PartSummary is a shard's part of one study at a step.
type PartSummary struct {
	Done    []Done    // units that became complete, in order of completion
	Vectors []float64 // their components, width a unit, in the same order
	Deltas  []Delta   // changes of the provisional sums, by group
	Arms    []string  // the shard's numbering of arms, all so far
	Segs    []SegmentSeen
	ByArm   []ArmCounts
	Rows    int // units kept
	Open    int // units that have entered and are not complete
	Waiting int // units that have not entered, for which events are held
	Power   uint8
}

// Done is one completed unit.
type Done struct {
	At   int64  // time of completion
	Hash uint64 // keyed hash of the unit, which orders equal times
	Arm  uint8  // the shard's number of its arm
	Seg  uint16 // the shard's number of its segment, 0 for none
	// Power is the power of two that is its weight: of how many units it stands for.
	Power uint8
}

// SegmentSeen is a segment in the order of its first entry in the shard.
type SegmentSeen struct {
	Values []string
	At     int64 // first entry
	Hash   uint64
}

// ArmCounts count units of an arm so far.
type ArmCounts struct {
	Entered    int64
	Conflicted int64 // seen in another arm too
	Late       int64 // with an event that came too late and matched a tally
	Lost       int64
}

// UnitsKept is what a shard keeps of a study's units.
type UnitsKept struct {
	Open  int64 // have entered and are not complete
	Rows  int64
	Bytes int64 // of rows, keys and held events
}

// Add adds up.
func (u *UnitsKept) Add(v UnitsKept) {
	u.Open += v.Open
	u.Rows += v.Rows
	u.Bytes += v.Bytes
}

// Kept tells what the shard keeps of a study's units.
func (sh *Shard) Kept(study int) UnitsKept {
	p := sh.parts[study]
	return UnitsKept{Open: int64(p.rows.Count(units.Open)), Rows: int64(p.rows.Len()), Bytes: p.rows.Bytes() + p.gone.bytes() + int64(cap(p.queue.rows))*4}
}

// Peek brings what Apply of a touch will need nearer; see units.Table.Peek. It changes
// nothing, and its result means nothing.
func (sh *Shard) Peek(t Touch) uint64 { return sh.parts[t.Study()].rows.Peek(t.hash()) }
