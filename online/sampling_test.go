package online

import (
	"bytes"
	"fmt"
	"math"
	"slices"
	"testing"

	"stillwell/online/moment"
	"stillwell/online/units"
)

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

// TestFloodSurvivesRestart: floods within steps, rows dropped and events held, with and without a
// restart at every step.
func TestFloodSurvivesRestart(t *testing.T) {
	run := func(restart bool) (readings []byte, o Outcomes, doors []door) {
		b := newBerth(t, Limits{Units: 300, Rows: 500}, nil)
		for minute := range int64(300) {
			n := 12
			if minute%70 == 20 {
				n = 2500
			}
			for i := range n {
				b.event(minute*60+1, int(minute)*40+i, i%3 != 0, 1)
				b.event(minute*60+1, int(minute)*35-i, i%5 == 0, 2)
			}
			out := b.step(minute*60 + 60)
			for i := range out.Readings {
				var err error
				if readings, err = AppendLine(readings, &out.Readings[i]); err != nil {
					t.Fatal(err)
				}
			}
			if restart {
				b.restart()
			}
		}
		if off := b.audit(); off > 1e-13 {
			t.Errorf("sums are off by %g", off)
		}
		doors = append(doors, b.desk.studies[0].door)
		for _, sh := range b.shards {
			doors = append(doors, sh.parts[0].door)
		}
		return readings, b.outcomes(), doors
	}
	want, counted, doors := run(false)
	got, again, doorsAgain := run(true)
	if !bytes.Equal(got, want) || len(want) == 0 {
		t.Error("readings differ after restarts")
	}
	if counted != again || counted.Unsampled == 0 {
		t.Errorf("counted %+v, want %+v", again, counted)
	}
	if !slices.Equal(doors, doorsAgain) || doors[0].power < 3 {
		t.Errorf("doors are %v, want %v", doorsAgain, doors)
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
