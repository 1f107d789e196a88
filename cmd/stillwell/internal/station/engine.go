package station

import (
	"math"
	"sync"
	"time"

	"stillwell/online"
	"stillwell/stream/order"
)

// An engine takes ordered events through the shards to the desk, step by step. It is the
// one place where event time advances. Not for concurrent use; it uses several workers
// of its own within a call.
type engine struct {
	plan    *online.Plan
	seq     *order.Sequencer
	shards  []*online.Shard
	desk    *online.Desk
	workers int

	inbox   [online.Shards][]parcel
	peeked  [online.Shards]uint64 // only so that no compiler leaves the peeking out
	pending int
	step    int64 // end of the last step evaluated; order.Never before the first
	begun   int64 // time of the earliest delivered event; order.Never before it
	sums    []online.Summary
	out     func(online.Output) error // called at each step, when the state is that step's exactly

	// patience is how many events may wait for their step's end before those that are in
	// order are applied ahead of it. Between steps the state is then no step's.
	patience int
	clean    bool // the state is that of the last step's end

	took time.Duration // to evaluate the last step
}

// parcel is a touch on its way to a shard.
type parcel struct {
	at    int64
	touch online.Touch
	late  bool
}

func newEngine(plan *online.Plan, seq *order.Sequencer, workers int, out func(online.Output) error) *engine {
	e := &engine{plan: plan, seq: seq, desk: online.NewDesk(plan), workers: max(1, workers),
		step: order.Never, begun: order.Never, sums: make([]online.Summary, online.Shards), out: out, clean: true}
	for i := range online.Shards {
		e.shards = append(e.shards, online.NewShard(plan, i))
	}
	return e
}

// ahead is how many touches a worker looks ahead of; see units.Table.Peek.
const ahead = 16

// enough is how many touches are worth waking the workers for.
const enough = 1 << 14

// add takes a batch and goes as far as the watermark allows.
func (e *engine) add(b *order.Batch) error {
	e.seq.Add(b)
	return e.advance()
}

// advance evaluates every step before the watermark in which anything happens.
func (e *engine) advance() error {
	w := e.seq.Watermark()
	if w == order.Never {
		return nil
	}
	for {
		T, ok := e.next()
		if !ok || T >= w {
			break
		}
		e.release(T)
		if err := e.end(T, false); err != nil {
			return err
		}
	}
	if e.seq.Unsettled() >= e.patience && e.seq.ReleaseSlices(w, math.MaxInt64, e.deliver) {
		e.clean = false
		if e.pending >= enough {
			e.apply(order.Never, false)
		}
	}
	e.seq.Level()
	return nil
}

// finish ends a finite source: everything is released, and the desk takes a last view as
// of the largest event time.
func (e *engine) finish() error {
	e.release(math.MaxInt64)
	last := e.seq.Newest()
	if last == order.Never {
		return nil
	}
	e.apply(order.Never, false)
	if err := e.end(last, true); err != nil {
		return err
	}
	for _, sh := range e.shards {
		sh.Finish()
	}
	return nil
}

// release settles everything up to T and hands it to the shards' inboxes.
func (e *engine) release(T int64) { e.seq.Release(T, e.deliver) }

// next is the end of the next step in which anything happens.
func (e *engine) next() (int64, bool) {
	at, ok := e.seq.Waiting()
	due, has := e.due()
	if has && (!ok || due < at) {
		at, ok = due, true
	}
	if !ok {
		return 0, false
	}
	every := int64(e.plan.Every)
	T := ceilDiv(at, every) * every
	if e.step != order.Never && T <= e.step {
		T = e.step + every
	}
	return T, true
}

// due is the earliest time at which a step is due without further events: a completion, or
// what was applied ahead of its step's end, or at the very end of the last step.
func (e *engine) due() (int64, bool) {
	e.apply(order.Never, false)
	at, ok := e.desk.Due()
	for _, sh := range e.shards {
		if d, has := sh.Due(); has && (!ok || d < at) {
			at, ok = d, true
		}
		if d, has := sh.Stirred(); has && (!ok || d < at) {
			at, ok = d, true
		}
	}
	return at, ok
}

func ceilDiv(a, b int64) int64 {
	q := a / b
	if a%b > 0 {
		q++
	}
	return q
}

// deliver routes an event's touches to their shards.
func (e *engine) deliver(ev order.Event) {
	if ev.Gap != nil {
		e.apply(order.Never, false)
		for _, sh := range e.shards {
			sh.Gap(ev.Gap.From, ev.Gap.To)
		}
		e.desk.Gap(ev.Gap.From, ev.Gap.To)
		return
	}
	if !ev.Late && e.begun == order.Never {
		e.begun = ev.At
		e.begin(ev.At)
	}
	for p := ev.Payload; len(p) > 0; {
		var t online.Touch
		t, p = online.NextTouch(p)
		i := t.Shard()
		e.inbox[i] = append(e.inbox[i], parcel{ev.At, t, ev.Late})
		e.pending++
	}
}

func (e *engine) begin(at int64) {
	for _, sh := range e.shards {
		sh.Begin(at)
	}
	e.desk.Begin(at)
}

// apply empties the inboxes into the shards; with end, it also closes the step at T, and
// applies what belongs after it.
func (e *engine) apply(T int64, end bool) {
	if e.pending == 0 && !end {
		return
	}
	if e.workers == 1 || e.pending < enough/8 && !end {
		for i := range e.shards {
			e.serve(i, T, end)
		}
	} else {
		var wg sync.WaitGroup
		for w := range e.workers {
			wg.Go(func() {
				for i := w; i < len(e.shards); i += e.workers {
					e.serve(i, T, end)
				}
			})
		}
		wg.Wait()
	}
	e.pending = 0
	e.seq.Recycle()
}

// serve gives one shard its inbox. Events of the very end of a step belong before it
// where they are units, and after it where they are not.
func (e *engine) serve(i int, T int64, end bool) {
	sh, in := e.shards[i], e.inbox[i]
	entriesFirst(in)
	after := len(in)
	for k, p := range in {
		if end && p.at >= T {
			after = k
			break
		}
		if k%ahead == 0 {
			for _, q := range in[k:min(k+ahead, len(in))] {
				e.peeked[i] += sh.Peek(q.touch)
			}
		}
		give(sh, p)
	}
	if end {
		for _, p := range in[after:] {
			if e.alone(p) {
				give(sh, p)
			}
		}
		e.sums[i] = sh.End(T)
		for _, p := range in[after:] {
			if !e.alone(p) {
				give(sh, p)
			}
		}
	}
	clear(in)
	e.inbox[i] = in[:0]
}

func (e *engine) alone(p parcel) bool {
	return e.plan.Studies[p.touch.Study()].Units.Kind == online.EventsAlone
}

func give(sh *online.Shard, p parcel) {
	if p.late {
		sh.ApplyLate(p.at, p.touch)
	} else {
		sh.Apply(p.at, p.touch)
	}
}

// entriesFirst moves, among touches of equal time, those that may be entries before the
// others, and keeps the order otherwise.
func entriesFirst(in []parcel) {
	for i := 1; i < len(in); i++ {
		for j := i; j > 0 && in[j].at == in[j-1].at && in[j].touch.Entry() && !in[j-1].touch.Entry(); j-- {
			in[j], in[j-1] = in[j-1], in[j]
		}
	}
}

// end evaluates the step at T.
func (e *engine) end(T int64, final bool) error {
	start := time.Now()
	e.apply(T, true)
	e.step, e.clean = T, true
	out := e.desk.Step(T, e.sums, final)
	if !final {
		e.desk.Bound(T, e.shards)
	}
	e.took = time.Since(start)
	return e.out(out)
}

// outcomes of a study's events, of all that are settled.
func (e *engine) outcomes(study int) online.Outcomes {
	var o online.Outcomes
	for _, sh := range e.shards {
		o.Add(sh.Outcomes(study))
	}
	o.Filtered += e.seq.Settled().Delivered - o.Total()
	return o
}
