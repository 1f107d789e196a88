package online

import (
	"math"

	"stillwell/online/units"
)

// A part is a shard's part of one study: its unit rows and what changed in them
// since the last step.
type part struct {
	s       *Study
	l       *layout
	limits  Limits
	rows    *units.Table
	queue   queue // open rows in order of entry, so of completion
	wheel   wheel // rows that hold earlier events
	counts  Outcomes
	start   int64 // buckets: the first bucket that counts starts here or later
	clock   int64 // time of the last event or step
	stirred int64 // time of the first event applied since the last step; NoTime if none was
	lostTo  int64 // entries up to it are lost to a gap

	arms  names
	segs  []SegmentSeen
	segAt names
	byArm []ArmCounts
	door  door
	swept uint8 // nothing is held for units that this power refuses
	gone  gone

	changed changes // rows touched in this step, for the provisional sums
	done    []Done
	vectors []float64

	values []float64 // scratch: a row's values
	z      []float64 // scratch: a unit's vector
	fields [][]byte  // scratch: an entry's segment fields
	label  []byte    // scratch
	past   []float64 // scratch: values of an event over the past
}

// Bits of a row's flags.
const (
	rowChanged    = 1 << iota // in changes of this step
	rowConflicted             // seen in another arm
	rowLate                   // had an event that came too late
	rowLost                   // left because events are missing
)

func newPart(s *Study, limits Limits) *part {
	l := s.layout
	p := &part{
		s: s, l: l, limits: limits, start: math.MaxInt64, clock: NoTime, lostTo: NoTime, stirred: NoTime,
		rows:   units.New(l.tallies, len(l.before) > 0, len(l.before)),
		values: make([]float64, l.tallies), z: make([]float64, l.width),
		fields: make([][]byte, len(s.Units.By)), past: make([]float64, len(l.before)),
	}
	p.changed.init(l)
	if s.Units.Arm < 0 {
		p.addArm("all")
	}
	for _, a := range s.Units.Arms {
		p.addArm(a.Name)
	}
	return p
}

func (p *part) addArm(name string) int {
	p.byArm = append(p.byArm, ArmCounts{})
	return p.arms.add(name)
}

func (p *part) begin(at int64) {
	u := &p.s.Units
	if u.Kind != Buckets || p.start != math.MaxInt64 {
		return
	}
	if u.From != NoTime {
		p.start = u.From
		return
	}
	p.start = (floorDiv(at, int64(u.Every)) + 1) * int64(u.Every)
}

func (p *part) outcomes() Outcomes {
	o := p.counts
	o.Waiting = int64(p.rows.Held.Len())
	return o
}

func (p *part) stir(at int64) {
	if p.stirred == NoTime {
		p.stirred = at
	}
}

func (p *part) apply(at int64, t Touch) {
	p.stir(at)
	p.advance(at)
	switch p.s.Units.Kind {
	case Keyed:
		p.applyKeyed(at, t)
	case Buckets:
		p.applyBucket(at, t)
	case EventsAlone:
		p.applyAlone(at, t)
	}
}

// span is how long a unit counts; 0: for ever.
func (p *part) span() int64 {
	if p.s.Units.Kind == Buckets {
		return int64(p.s.Units.Every)
	}
	return int64(p.s.Units.FollowUp)
}

func (p *part) due() (int64, bool) {
	r, ok := p.queue.first()
	if !ok {
		return 0, false
	}
	return p.rows.Entry(r) + p.span(), true
}

// advance completes every unit whose time is over at or before now.
func (p *part) advance(now int64) {
	p.clock = max(p.clock, now)
	over := len(p.gone.over.rows)
	for {
		at, ok := p.due()
		if !ok || at > now {
			break
		}
		r, _ := p.queue.pop()
		p.gone.over.push(r)
		if p.rows.State(r) != units.Open {
			continue
		}
		arm, seg := p.rows.Group(r)
		p.l.vector(p.rows.Values(r), p.z)
		p.complete(Done{At: at, Hash: p.rows.Hash(r), Arm: arm, Seg: seg, Power: p.rows.Power(r)}, p.z)
		p.rows.SetState(r, units.Complete)
	}
	p.line(over)
}

func (p *part) complete(d Done, z []float64) {
	p.done = append(p.done, d)
	p.vectors = append(p.vectors, z...)
}

// admit opens a row for a unit at its entry. The row's earlier state is gone but for
// the events held for it.
func (p *part) admit(r units.Row, at int64, arm uint8, seg uint16) {
	p.rows.Enter(r, at, arm, seg, p.door.power)
	v := p.rows.Change(r)
	for i := range p.s.Tallies {
		v[i] = initial(p.s.Tallies[i].Kind)
	}
	if p.span() > 0 {
		p.queue.push(r)
	}
	p.byArm[arm].Entered++
	p.changed.fresh(p.rows, r)
	if at <= p.lostTo {
		p.lose(r)
	}
}

func initial(k TallyKind) float64 {
	if startsAbsent(k) {
		return math.NaN()
	}
	return 0
}

// tally folds a value into a running quantity; NaN is absent.
func tally(k TallyKind, old, x float64) float64 {
	switch k {
	case Count:
		return old + 1
	case Any:
		return 1
	case SumOf:
		return old + x
	case Min:
		if !(old <= x) {
			return x
		}
	case Max:
		if !(old >= x) {
			return x
		}
	case First:
		if math.IsNaN(old) {
			return x
		}
	case Last:
		return x
	}
	return old
}

// applyBucket tallies an event into its time bucket.
func (p *part) applyBucket(at int64, t Touch) {
	u := &p.s.Units
	c := t.body()
	c.bytes()
	begin := floorDiv(at, int64(u.Every)) * int64(u.Every)
	if begin < p.start || u.Until != NoTime && begin >= u.Until {
		p.counts.Outside++
		return
	}
	key := bucketKey(begin)
	r := p.rows.Find(t.hash(), key[:])
	if r == units.None {
		r = p.rows.Insert(t.hash(), key[:], units.Open)
		p.admit(r, begin, 0, 0)
	}
	if p.rows.State(r) != units.Open {
		p.counts.Outside++ // events of this bucket are missing: it is left out
		return
	}
	p.changed.touch(p.rows, r, p.l)
	v := p.rows.Change(r)
	for range c.byte() {
		j := c.byte()
		v[j] = tally(p.s.Tallies[j].Kind, v[j], c.float())
	}
	p.counts.Applied++
}

// applyAlone makes an event a unit of its own, complete at its own time.
func (p *part) applyAlone(at int64, t Touch) {
	u := &p.s.Units
	if !t.Entry() || u.From != NoTime && at < u.From || u.Until != NoTime && at >= u.Until {
		p.counts.Outside++
		return
	}
	c := t.body()
	c.bytes()
	p.readFields(&c)
	seg := p.segment(at, t.hash())
	n := len(p.s.Tallies)
	for i := range n {
		p.values[i] = initial(p.s.Tallies[i].Kind)
	}
	for i := n; i < p.l.tallies; i++ {
		p.values[i] = c.float()
	}
	for range c.byte() {
		j := c.byte()
		p.values[j] = tally(p.s.Tallies[j].Kind, p.values[j], c.float())
	}
	p.l.vector(p.values, p.z)
	p.complete(Done{At: at, Hash: t.hash(), Seg: seg}, p.z)
	p.byArm[0].Entered++
	p.counts.Applied++
}

// end closes a step; see Shard.End.
func (p *part) end(T int64) PartSummary {
	p.advance(T)
	p.expire(T)
	p.stirred = NoTime
	out := PartSummary{
		Done: p.done, Vectors: p.vectors, Deltas: p.changed.settle(p.rows, p.l),
		Arms: p.arms.list, Segs: p.segs, ByArm: p.byArm,
		Rows: p.rows.Len(), Open: p.rows.Count(units.Open), Waiting: p.rows.Count(units.Waiting), Power: p.door.power,
	}
	p.done, p.vectors = emptied(p.done), emptied(p.vectors)
	return out
}
