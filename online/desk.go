package online

import (
	"cmp"
	"slices"
)

// A Desk gathers the shards' summaries step by step and says what there is to say: it
// adds completed units one by one in canonical order, keeps every group's sums, and
// evaluates readings, watches and allocation checks. A pure state machine, like Shard.
type Desk struct {
	plan    *Plan
	studies []*ledger
}

// NewDesk returns the desk of a compiled plan before its first step.
func NewDesk(p *Plan) *Desk {
	d := &Desk{plan: p}
	for i := range p.Studies {
		d.studies = append(d.studies, newLedger(p, &p.Studies[i]))
	}
	return d
}

// Begin tells the time of the stream's earliest delivered event, before the first step. A
// study that has begun already takes no notice.
func (d *Desk) Begin(at int64) {
	for _, l := range d.studies {
		l.begin(at)
	}
}

// Due is the earliest time at which something becomes complete without any shard knowing
// of it: a time bucket without events.
func (d *Desk) Due() (at int64, ok bool) {
	for _, l := range d.studies {
		if t, has := l.due(); has && (!ok || t < at) {
			at, ok = t, true
		}
	}
	return at, ok
}

// Output is what a step says. Readings and Watches are those that have changed; Latest is
// every reading whose provisional part may have changed besides.
type Output struct {
	Time     int64
	Readings []Reading
	Watches  []WatchReading
	Alarms   []Alarm
	Latest   []Reading
}

// Step evaluates the step that ends at T, from the summaries of all shards in order.
// final marks the view at the end of a finite source.
func (d *Desk) Step(T int64, sums []Summary, final bool) Output {
	out := Output{Time: T}
	for i, l := range d.studies {
		l.gather(T, sums, i)
		if !final {
			l.admit(sums, i)
		}
		l.evaluate(T, final, &out)
	}
	return out
}

// unit is a completed unit on its way into the sums.
type unit struct {
	Done
	shard int
	arm   int // the desk's number
	place int // the desk's segment place, 0 for none
	z     []float64
}

// gather takes the summaries of one step.
func (l *ledger) gather(T int64, sums []Summary, study int) {
	l.name(sums, study)
	done := l.done[:0]
	width := l.l.width
	for k := range sums {
		p := &sums[k].Parts[study]
		for i, d := range p.Done {
			done = append(done, unit{Done: d, shard: k, arm: l.armOf(k, d.Arm), place: l.placeOf(k, d.Seg),
				z: p.Vectors[i*width : (i+1)*width]})
		}
	}
	// Time of completion, then the keyed hash: units of one hash are of one shard, and keep its order.
	slices.SortStableFunc(done, func(a, b unit) int {
		return cmp.Or(cmp.Compare(a.At, b.At), cmp.Compare(a.Hash, b.Hash))
	})
	if l.s.Units.Kind == Buckets {
		l.addBuckets(T, done)
	} else {
		for i := range done {
			l.add(&done[i])
		}
	}
	clear(done) // what they refer to is the shards'
	l.done = emptied(done)
	for k := range sums {
		p := &sums[k].Parts[study]
		for _, d := range p.Deltas {
			l.shift(l.armOf(k, d.Arm), l.placeOf(k, d.Seg), d)
		}
	}
	l.count(sums, study)
}
