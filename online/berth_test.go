package online

import (
	"fmt"
	"testing"
	"time"

	"stillwell/online/expr"
	"stillwell/online/units"
	"stillwell/online/wire"
)

// A berth is a small study driven by hand: passengers enter by an event with a fare of its own,
// buy more within an hour, and what they paid in the three hours before is adjusted for.
type berth struct {
	t      *testing.T
	plan   *Plan
	shards []*Shard
	desk   *Desk
	sums   []Summary
	record expr.Record
	given  int64 // events
}

const (
	berthKey = iota
	berthEntry
	berthFare
)

func newBerth(t *testing.T, limits Limits, change func(*Study)) *berth {
	t.Helper()
	p := &Plan{Fields: &expr.Fields{}, Every: time.Minute, Level: .95, Limits: limits}
	for _, f := range []string{"passenger", "entry", "fare"} {
		p.Fields.Slot(f)
	}
	filter := func(text string) *expr.Filter {
		f, err := expr.ParseFilter(text, p.Fields)
		if err != nil {
			t.Fatal(err)
		}
		return f
	}
	fare, err := expr.ParseValue("fare", p.Fields)
	if err != nil {
		t.Fatal(err)
	}
	s := Study{Name: "berths", Units: Units{Arm: -1, From: NoTime, Until: NoTime, FollowUp: time.Hour, Again: time.Hour, Entry: filter("entry")},
		Tallies: []Tally{{Name: "fare", Kind: SumOf, Value: fare}, {Name: "past", Kind: SumOf, Value: fare, Before: 3 * time.Hour}}}
	mean, err := expr.ParseEstimate("mean(fare)", []expr.Tally{{Name: "fare"}})
	if err != nil {
		t.Fatal(err)
	}
	s.Estimates = []Estimate{{Name: "fare", Of: mean, Adjust: []Covariate{{Name: "past", Tally: 1}}}}
	if change != nil {
		change(&s)
	}
	p.Studies = []Study{s}
	if err := p.Compile(); err != nil {
		t.Fatal(err)
	}
	b := &berth{t: t, plan: p, desk: NewDesk(p), sums: make([]Summary, Shards), record: make(expr.Record, len(p.Fields.Names()))}
	for i := range Shards {
		b.shards = append(b.shards, NewShard(p, i))
	}
	return b
}

// event is one of a passenger at so many seconds.
func (b *berth) event(second int64, who int, entry bool, fare float64) {
	b.t.Helper()
	b.record[berthKey] = expr.Value{Kind: expr.Text, Text: fmt.Appendf(nil, "p-%d", who)}
	b.record[berthEntry] = expr.Value{Kind: expr.Bool, True: entry}
	b.record[berthFare] = expr.Value{Kind: expr.Number, Num: fare}
	at := second * int64(time.Second)
	payload, fault := b.plan.Project(b.record, at, nil)
	if fault != nil {
		b.t.Fatal(fault)
	}
	if b.given == 0 {
		b.desk.Begin(at)
		for _, sh := range b.shards {
			sh.Begin(at)
		}
	}
	b.given++
	for len(payload) > 0 {
		var t Touch
		t, payload = NextTouch(payload)
		b.shards[t.Shard()].Apply(at, t)
	}
}

func (b *berth) step(second int64) Output {
	T := second * int64(time.Second)
	for i, sh := range b.shards {
		b.sums[i] = sh.End(T)
	}
	out := b.desk.Step(T, b.sums, false)
	b.desk.Bound(T, b.shards)
	return out
}

func (b *berth) outcomes() (o Outcomes) {
	for _, sh := range b.shards {
		o.Add(sh.Outcomes(0))
	}
	return o
}

func (b *berth) count(states ...units.State) (n int) {
	for _, sh := range b.shards {
		for _, s := range states {
			n += sh.parts[0].rows.Count(s)
		}
	}
	return n
}

func (b *berth) audit() float64 {
	var recounts []Recount
	for _, sh := range b.shards {
		recounts = append(recounts, sh.Recount())
	}
	return b.desk.Audit(recounts)[0].Off
}

// restart goes on from what is stored at a step's end.
func (b *berth) restart() {
	b.t.Helper()
	pages := map[string][]byte{}
	keep := func(ps []Page) {
		for _, p := range ps {
			var w wire.Writer
			p.Encode(&w)
			pages[p.Name] = w.B
		}
	}
	keep(b.desk.Snapshot(true))
	for _, sh := range b.shards {
		keep(sh.Snapshot(true))
	}
	b.desk = NewDesk(b.plan)
	if err := b.desk.Restore(pages); err != nil {
		b.t.Fatal(err)
	}
	for i := range b.shards {
		b.shards[i] = NewShard(b.plan, i)
		if err := b.shards[i].Restore(pages); err != nil {
			b.t.Fatal(err)
		}
	}
}
