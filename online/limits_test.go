package online

import (
	"fmt"
	"math"
	"os"
	"runtime"
	"slices"
	"testing"
	"time"

	"stillwell/online/expr"
	"stillwell/online/moment"
	"stillwell/online/units"
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

// TestDoorLeavesRoom: however many come, and none go, open units stay below twice the limit,
// and admission is halved as seldom as that allows: first at the limit itself.
func TestDoorLeavesRoom(t *testing.T) {
	const limit = 1000
	for _, many := range []int{1, 10, 100, 1000} { // units a step
		var d door
		open := 0.
		for came := 0; came < 100*limit; came += many {
			before := d.power
			open += float64(many) * d.probability()
			d.meet(int(open), limit)
			if before == 0 && d.power > 0 && (open < limit || open >= limit+float64(many)) {
				t.Errorf("%d a step: halved first at %.0f open", many, open)
			}
			if open >= 2*limit+float64(many) {
				t.Fatalf("%d a step: %.0f open after %d", many, open, came)
			}
		}
		if d.power < 6 || d.power > 16 {
			t.Errorf("%d a step: halved %d times for a hundred times the limit", many, d.power)
		}
	}
	var d door
	d.meet(limit, limit)
	for range 100 {
		d.meet(limit, limit) // they stay, and no more come
	}
	if d.power != 1 {
		t.Errorf("halved %d times for one limit", d.power)
	}
	d.meet(limit/2-1, limit)
	d.meet(limit, limit)
	if d.power != 2 {
		t.Errorf("halved %d times for reaching the limit twice", d.power)
	}
}

// TestLotIsItsOwn: each power admits its share of every shard's units, and whom it admits has
// nothing to do with the order of their hashes; a smaller probability admits no one else.
func TestLotIsItsOwn(t *testing.T) {
	const n = 1 << 20
	k := newKeyed("berths")
	var shard [Shards]float64
	var before, low, all float64
	for i := range uint64(n) {
		hash := k.number(i)
		var one, two = door{power: 1}, door{power: 3}
		if one.refuses(hash) {
			if two.refuses(hash) == false {
				t.Fatal("refused at 1/2, and admitted at 1/8")
			}
			continue
		}
		all++
		if two.refuses(hash) {
			continue
		}
		before++
		shard[hash%Shards]++
		if hash>>63 == 0 {
			low++
		}
	}
	near := func(what string, got, want float64) {
		if math.Abs(got-want) > 5*math.Sqrt(want) {
			t.Errorf("%s: %.0f, want about %.0f", what, got, want)
		}
	}
	near("admitted at 1/2", all, n/2)
	near("admitted at 1/8", before, n/8)
	near("of these in the lower half of hashes", low, n/16)
	for s, x := range shard {
		near(fmt.Sprint("of these in shard ", s), x, n/8/Shards)
	}
}

// TestFloodWithinAStep: shards halve on their own when everyone comes at once, so that memory
// stays bounded, and the weights of those admitted still add up to all who came.
func TestFloodWithinAStep(t *testing.T) {
	const limit, came = 6400, 300_000
	b := newBerth(t, Limits{Units: limit}, nil)
	for i := range came {
		b.event(int64(i/100_000), i, true, 1)
	}
	open := b.count(units.Open)
	if open > 4*limit+2*32*Shards {
		t.Errorf("%d units open, at most %d", open, 4*limit+2*32*Shards)
	}
	b.step(60)
	all := b.desk.studies[0].group(0, 0).all
	// The variance of the total: each unit of weight w stands for itself and w - 1 others.
	var v float64
	all.each(func(w float64, c *moment.Cell) { v += w * (w - 1) * float64(c.Units()) })
	if off := math.Abs(all.weight() - came); off > 4*math.Sqrt(v) {
		t.Errorf("weights of %.0f for %d units, more than four standard errors of %.0f", all.weight(), came, math.Sqrt(v))
	}
	if !all.mixed() {
		t.Error("all weights are the same")
	}
	power := b.desk.studies[0].door.power
	for _, sh := range b.shards {
		if p := sh.parts[0].door.power; p != power {
			t.Errorf("%v admits by 2^-%d, the study by 2^-%d", sh, p, power)
		}
	}
	if o := b.outcomes(); o.Applied != int64(open) || o.Unsampled != int64(came-open) || o.Total() != b.given {
		t.Errorf("counted %+v of %d, %d open", o, b.given, open)
	}
}

// TestUnsampledIsCounted: everything of a unit that is not admitted is unsampled, what was held
// for it too, but for what was too old already; and nothing is held for it.
func TestUnsampledIsCounted(t *testing.T) {
	b := newBerth(t, Limits{Units: 10}, nil)
	for who := range 40 {
		b.event(0, who, false, 1) // too old for an entry after three hours
	}
	for who := range 40 {
		b.event(2*3600, who, false, 1)
	}
	if n := b.count(units.Waiting); n != 40 {
		t.Fatalf("%d wait", n)
	}
	b.step(3*3600 + 60) // halved for those who wait, and half of them let go
	d := &b.desk.studies[0].door
	if d.power != 1 {
		t.Fatalf("halved %d times", d.power)
	}
	admitted := 0
	for who := range 40 {
		hash := b.plan.Studies[0].keyed.sum(fmt.Appendf(nil, "p-%d", who))
		if !d.refuses(hash) {
			admitted++
		}
	}
	if n := b.count(units.Waiting); n != admitted || admitted == 0 || admitted == 40 {
		t.Fatalf("%d wait, of %d that may enter", n, admitted)
	}
	for who := range 40 {
		b.event(3*3600+120, who, true, 1)
	}
	for who := range 40 {
		b.event(3*3600+180, who, false, 1)
	}
	want := Outcomes{Applied: 3 * int64(admitted), Outside: 40, Unsampled: 3 * int64(40-admitted)}
	if o := b.outcomes(); o != want || o.Total() != b.given {
		t.Errorf("counted %+v of %d, want %+v", o, b.given, want)
	}
	if off := b.audit(); off > 1e-15 {
		t.Errorf("sums are off by %g", off)
	}
}

// TestOldestRowsGoFirst: over all shards, in order of completion and then of the hash.
func TestOldestRowsGoFirst(t *testing.T) {
	b := newBerth(t, Limits{Rows: 300}, nil)
	const n = 500
	for who := range n {
		b.event(int64(who/60), who, true, float64(who))
	}
	b.step(3600 + n)
	type over struct {
		end  int64
		hash uint64
	}
	var kept, all []over
	for _, sh := range b.shards {
		p := sh.parts[0]
		p.rows.Each(func(r units.Row) { kept = append(kept, over{p.endOf(r), p.rows.Hash(r)}) })
	}
	for who := range n {
		all = append(all, over{(3600 + int64(who/60)) * int64(time.Second), b.plan.Studies[0].keyed.sum(fmt.Appendf(nil, "p-%d", who))})
	}
	byAge := func(a, b over) int {
		if a.end != b.end {
			return int(a.end - b.end)
		}
		if a.hash < b.hash {
			return -1
		}
		return 1
	}
	slices.SortFunc(all, byAge)
	slices.SortFunc(kept, byAge)
	if !slices.Equal(kept, all[n-300:]) {
		t.Errorf("%d rows kept, and not the last 300", len(kept))
	}
	if off := b.audit(); off > 1e-14 {
		t.Errorf("sums are off by %g", off)
	}
}

// TestAuditSeesDamage: a sum that is not that of the rows, a row that is not what was
// added, and a row that is gone without a trace.
func TestAuditSeesDamage(t *testing.T) {
	fill := func() *berth {
		b := newBerth(t, Limits{Units: 400, Rows: 600}, nil)
		for who := range 3000 {
			b.event(int64(who), who, true, float64(who%97)+.1)
			if who%60 == 59 {
				b.step(int64(who) + 1)
			}
		}
		for who := 2900; who < 3200; who++ { // since the step's end
			b.event(3000, who, who >= 3000, 5)
		}
		if off := b.audit(); off > 1e-14 {
			t.Errorf("sound sums are off by %g", off)
		}
		return b
	}
	b := fill()
	g := b.desk.studies[0].group(0, 0)
	if !g.all.mixed() {
		t.Error("nothing was sampled")
	}
	g.all.at(1).Add([]float64{1, 1})
	if b.audit() != 1 {
		t.Error("a unit too many was not seen")
	}
	b = fill()
	g = b.desk.studies[0].group(0, 0)
	g.all.at(0).Replace([]float64{1, 0}, []float64{1.0000001, 0})
	if off := b.audit(); off < 1e-12 || off > 1e-6 {
		t.Errorf("a sum too large by 1e-7 is off by %g", off)
	}
	for _, sh := range b.shards {
		p := sh.parts[0]
		if r, ok := p.queue.first(); ok {
			p.rows.Change(r)[0]++
			break
		}
	}
	if off := b.audit(); off < 1e-6 {
		t.Errorf("a row that changed is off by %g", off)
	}
}

// TestBytesAUnit: what a unit costs beside its key and the eight bytes of each tally.
func TestBytesAUnit(t *testing.T) {
	n := 200_000
	if os.Getenv("STILLWELL_LONG") == "1" {
		n = 1_000_000
	}
	heap := func() uint64 {
		var m runtime.MemStats
		runtime.GC()
		runtime.GC()
		runtime.ReadMemStats(&m)
		return m.HeapAlloc
	}
	four := func(s *Study) {
		for len(s.Tallies) < 4 {
			s.Tallies = append(s.Tallies, Tally{Name: fmt.Sprint("t", len(s.Tallies)), Kind: Count})
		}
		s.Tallies[1].Before, s.Estimates[0].Adjust = 0, nil
	}
	before := heap()
	b := newBerth(t, Limits{}, four)
	keys := 0
	for who := range n {
		b.event(int64(who/200), who, true, 1)
		keys += len(fmt.Sprintf("p-%d", who))
		if who%12_000 == 11_999 {
			b.step(int64(who/200) + 1)
		}
	}
	b.step(int64(n)/200 + 60)
	open := heap()
	for i := range int64(4) {
		b.step(int64(n)/200 + 7200 + 60*i) // the first in which all become complete leaves buffers of its own
	}
	complete := heap()
	var told int64
	for _, sh := range b.shards {
		told += sh.Kept(0).Bytes
	}
	each := func(bytes uint64) float64 { return float64(bytes-before-uint64(keys))/float64(n) - 8*4 }
	t.Logf("%.1f bytes an open unit, %.1f a complete one beside key and tallies; %.1f told", each(open), each(complete), float64(told)/float64(n))
	if each(open) > 120 || each(complete) > 120 {
		t.Errorf("more than 120 bytes a unit")
	}
	runtime.KeepAlive(b)
}

// TestSampledReadingByHand: value, standard error, provisional ones and the heaviest unit's
// share from the rows, with their weights, by the textbook's sums.
func TestSampledReadingByHand(t *testing.T) {
	b := newBerth(t, Limits{Units: 8}, func(s *Study) {
		s.Tallies[1].Before, s.Estimates[0].Adjust = 0, nil
	})
	var r Reading // the last one; nothing has changed since
	for who := range 150 {
		b.event(int64(who*60), who, true, float64(who*who%31)+.5)
		if out := b.step(int64(who*60) + 60); len(out.Latest) > 0 {
			r = out.Latest[0]
		}
	}
	hand := func(all bool) (n int64, value, se, heaviest float64) {
		var w, z []float64
		for _, sh := range b.shards {
			rows := sh.parts[0].rows
			rows.Each(func(r units.Row) {
				if all || rows.State(r) == units.Complete {
					w, z = append(w, math.Ldexp(1, int(rows.Power(r)))), append(z, rows.Values(r)[0])
				}
			})
		}
		var sw, swz, squares, most float64
		for i := range w {
			sw, swz = sw+w[i], swz+w[i]*z[i]
		}
		value = swz / sw
		for i := range w {
			x := w[i] * (z[i] - value)
			squares, most = squares+x*x, max(most, x*x)
		}
		n = int64(len(w))
		return n, value, math.Sqrt(squares / sw / sw * float64(n) / float64(n-1)), most / squares
	}
	near := func(what string, got *float64, want, tolerance float64) {
		t.Helper()
		if got == nil || math.Abs(*got-want) > tolerance*want {
			t.Errorf("%s is %v, want %.15g", what, got, want)
			if got != nil {
				t.Logf("%.15g", *got)
			}
		}
	}
	n, value, se, heaviest := hand(false)
	if n > heaviestKept || r.Sampling > .25 || n < 10 {
		t.Fatalf("%d units of 150 at sampling %g: not what this test is about", n, r.Sampling)
	}
	if r.Units[0].N != n {
		t.Errorf("%d units, want %d", r.Units[0].N, n)
	}
	near("value", r.Value, value, 1e-14)
	near("standard error", r.StdError, se, 1e-13)
	near("heaviest", r.Heaviest, heaviest, 1e-11)
	n, value, se, _ = hand(true)
	if r.Provision.Units[0].N != n {
		t.Errorf("%d units so far, want %d", r.Provision.Units[0].N, n)
	}
	near("provisional value", r.Provision.Value, value, 1e-14)
	near("provisional standard error", r.Provision.StdError, se, 1e-13)
}
