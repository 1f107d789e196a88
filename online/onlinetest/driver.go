// Package onlinetest drives the state machines of package online from Go values, for
// tests that need many units and no stream: what it does to shards and desk is what the
// daemon does, with nothing to decode and nothing out of order.
package onlinetest

import (
	"fmt"
	"strconv"

	"stillwell/online"
	"stillwell/online/expr"
)

// A Driver takes the events of a Trial's plan through its shards to its desk. Not for
// concurrent use; any number of drivers may share a plan.
type Driver struct {
	plan    *online.Plan
	shards  []*online.Shard
	desk    *online.Desk
	sums    []online.Summary
	payload []byte
	now     int64 // of the last event or step
	begun   bool

	record expr.Record
	key    []byte
	texts  map[string][]byte
	units  int
}

// New returns a driver before its first event.
func New(plan *online.Plan) *Driver {
	d := &Driver{plan: plan, desk: online.NewDesk(plan), sums: make([]online.Summary, online.Shards), now: online.NoTime,
		record: make(expr.Record, len(plan.Fields.Names())), texts: map[string][]byte{}}
	for i := range online.Shards {
		d.shards = append(d.shards, online.NewShard(plan, i))
	}
	return d
}

// Unit enters one more unit: a name that none has had, its arm and segment, "" for none,
// and the numbers of its scores in order. It returns the unit's number, from 1.
//
// Events of any kind come in order of time; none is before the end of the last step, and
// those at the very end of a step are given after it. Panics where that is not so.
func (d *Driver) Unit(at int64, arm, segment string, values ...float64) int {
	d.units++
	d.Event(at, d.units, arm, segment, values...)
	return d.units
}

// Event is a further event of a unit, with fields as at its entry.
func (d *Driver) Event(at int64, unit int, arm, segment string, values ...float64) {
	d.advance(at)
	if !d.begun {
		d.Begin(at)
	}
	d.project(at, unit, arm, segment, values)
	for p := d.payload; len(p) > 0; {
		var t online.Touch
		t, p = online.NextTouch(p)
		d.shards[t.Shard()].Apply(at, t)
	}
}

// Late is an event of a unit that comes too late to count; at is its own time.
func (d *Driver) Late(at int64, unit int, arm, segment string, values ...float64) {
	d.project(at, unit, arm, segment, values)
	for p := d.payload; len(p) > 0; {
		var t online.Touch
		t, p = online.NextTouch(p)
		d.shards[t.Shard()].ApplyLate(at, t)
	}
}

// Begin tells the time of the stream's earliest event, where that is another than the
// first one given.
func (d *Driver) Begin(at int64) {
	for _, sh := range d.shards {
		sh.Begin(at)
	}
	d.desk.Begin(at)
	d.begun = true
}

// Step evaluates the step that ends at T.
func (d *Driver) Step(T int64) online.Output {
	d.advance(T)
	for i, sh := range d.shards {
		d.sums[i] = sh.End(T)
	}
	out := d.desk.Step(T, d.sums, false)
	d.desk.Bound(T, d.shards)
	return out
}

func (d *Driver) advance(at int64) {
	if at < d.now {
		panic(fmt.Sprintf("onlinetest: an event or step at %d after one at %d", at, d.now))
	}
	d.now = at
}

func (d *Driver) project(at int64, unit int, arm, segment string, values []float64) {
	d.key = strconv.AppendInt(d.key[:0], int64(unit), 36)
	d.record[slotUnit] = expr.Value{Kind: expr.Text, Text: d.key}
	d.record[slotArm] = d.text(arm)
	d.record[slotSegment] = d.text(segment)
	scores := d.record[slotScores:]
	for i, x := range values {
		scores[i] = expr.Value{Kind: expr.Number, Num: x}
	}
	clear(scores[len(values):])
	payload, fault := d.plan.Project(d.record, at, d.payload[:0])
	if fault != nil {
		panic(fault)
	}
	d.payload = payload
}

func (d *Driver) text(s string) expr.Value {
	if s == "" {
		return expr.Value{}
	}
	b, ok := d.texts[s]
	if !ok {
		b = []byte(s)
		d.texts[s] = b
	}
	return expr.Value{Kind: expr.Text, Text: b}
}
