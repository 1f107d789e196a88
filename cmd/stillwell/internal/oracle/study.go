// Package oracle is a second, plainer implementation of what a study file means. It holds all
// events in memory, looks at every event once per unit, sums in two passes, and shares no code
// with the engine; its tests hold the engine's last readings and counters against it.
package oracle

import "time"

// A File is a study file: a stream, studies on it, and the limits that touch numbers.
type File struct {
	Stream   Stream
	Studies  []Study
	Every    time.Duration // of a step
	Level    float64       // of intervals
	Segments int           // limits.segments; 0 leaves the default, 200
}

// A Stream says how lines become events.
type Stream struct {
	Time     string        // field of the event time
	Unix     time.Duration // unit of a numeric time; 0: RFC 3339
	ID       string        // field that tells duplicates; empty: none
	Lateness time.Duration
	Remember time.Duration // 0: the lateness
}

// A Study follows one population of units. Exactly one of Key, Bucket and Events is set.
type Study struct {
	Name string

	Key      string // field whose text is the unit
	Entry    *Cond  // nil: the unit's first event
	Arm      string // field of the entry event; empty: one arm
	Baseline string
	Arms     []string // declared, at equal shares; nil: whichever are seen
	Leave    bool     // conflict: leave
	FollowUp time.Duration
	From     time.Time // zero: none
	Until    time.Time // zero: none
	Again    time.Duration
	Never    bool // again: never
	By       []string

	Bucket time.Duration // units.every
	Events bool          // units: {events: independent}

	Tallies   []Tally
	Estimates []Estimate
}

// Kind is what a tally keeps of a unit's events.
type Kind string

// The kinds of tally.
const (
	Count Kind = "count"
	Sum   Kind = "sum"
	Min   Kind = "min"
	Max   Kind = "max"
	First Kind = "first"
	Last  Kind = "last"
	Any   Kind = "any"
)

// A Tally is a running quantity of one unit.
type Tally struct {
	Name   string
	Kind   Kind
	Value  Value         // of sum, min, max, first and last
	When   *Cond         // condition of count and any; optional else
	Before time.Duration // 0: of the follow-up
	Grain  time.Duration // 0: exact window
}

// An Estimate is a functional of score means, compared across arms or not.
type Estimate struct {
	Name     string
	Of       Formula
	Contrast string // "", "difference" or "relative"
	Present  bool   // among: present
	Adjust   []Covariate
}

// A Covariate is a tally before entry, or a field of the entry event.
type Covariate struct {
	Tally string
	Field string
}
