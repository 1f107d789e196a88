package online

import (
	"time"

	"stillwell/online/expr"
)

// A Study is one population of units followed on a stream, with what is estimated
// on it: the checked form of an entry under `studies:`. It is read-only once built;
// slots are those of the Plan's fields.
type Study struct {
	Name, About string
	Units       Units
	Tallies     []Tally
	Estimates   []Estimate
	Watches     []Watch

	keyed  keyed
	layout *layout
}

// UnitKind says what the independent unit is.
type UnitKind uint8

const (
	Keyed       UnitKind = iota // a person, device or session, named by a field
	Buckets                     // time buckets, aligned to the epoch
	EventsAlone                 // each event, by the user's assertion
)

// Units says who the independent unit is, when it enters and how long it counts.
type Units struct {
	Kind     UnitKind
	Key      int           // Keyed: the field's slot
	Every    time.Duration // Buckets: their length
	Entry    *expr.Filter  // nil: any event
	Arm      int           // the slot of the entry event's arm; -1: a study without arms
	Baseline string
	Arms     []Arm // planned shares; empty: arms as they come
	Leave    bool  // conflict: leave
	FollowUp time.Duration
	From     int64 // entries before it keep the unit out; Unix nanoseconds, NoTime if unset
	Until    int64 // entries from it on are outside; NoTime if unset
	Again    time.Duration
	Never    bool  // again: never
	By       []int // slots of the segment fields
	ByNames  []string
}

// NoTime stands for a time that the file does not give.
const NoTime = int64(-1 << 63)

// An Arm is a declared group with its planned share, in any common measure.
type Arm struct {
	Name  string
	Share float64
}

// TallyKind is how a tally runs.
type TallyKind uint8

const (
	Count TallyKind = iota
	SumOf
	Min
	Max
	First
	Last
	Any
)

// A Tally is a running quantity of one unit.
type Tally struct {
	Name   string
	Kind   TallyKind
	Value  *expr.Operand // nil for Count and Any
	When   *expr.Filter  // nil: every event; for Count and Any the filter itself
	Before time.Duration // > 0: over the span before entry instead of the follow-up
	Grain  time.Duration // > 0: the span's start is rounded down to it
}

// Contrast is how an estimate is compared across arms.
type Contrast uint8

const (
	NoContrast Contrast = iota
	Difference
	Relative
)

func (c Contrast) String() string { return [...]string{"", "difference", "relative"}[c] }

// A Covariate explains part of the scores: a tally over the past, or a numeric
// field of the entry event.
type Covariate struct {
	Name  string
	Tally int // index of a tally with Before; -1 for a field
	Field int // slot; -1 for a tally
}

// An Estimate is a named functional of score means.
type Estimate struct {
	Name     string
	Of       *expr.Estimate // its scores are over the study's tallies, by index
	Source   string         // as the file has it
	Contrast Contrast
	Adjust   []Covariate
	Present  bool          // among: present
	Window   time.Duration // > 0: over the units complete in the last Window
	TuneFor  float64       // complete units of the compared arms at which its boundary is tightest; 0: not given
	Start    time.Duration // > 0: delayed start, this long after the study's first entry
}

// Side is the direction of a watch's null region.
type Side uint8

const (
	Equal   Side = iota // against: '== x', alarmed by either side
	AtLeast             // against: '>= x', alarmed when the data rule out x and above
	AtMost              // against: '<= x', alarmed when the data rule out x and below
)

func (s Side) String() string { return [...]string{"==", ">=", "<="}[s] }

// A Watch is a sequential rule on an estimate, with a stated error.
type Watch struct {
	Name     string // given, or made from what it watches
	Estimate int    // index
	Against  Side
	Null     float64
	Error    float64
	TuneFor  float64
	Start    time.Duration
	Segments []string // a fixed list; nil: everyone
	Any      bool     // segments: any
}
