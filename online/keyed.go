package online

import (
	"encoding/binary"
	"math"

	"stillwell/online/units"
)

func bucketKey(begin int64) (b [8]byte) {
	binary.BigEndian.PutUint64(b[:], uint64(begin))
	return b
}

// applyKeyed is the life of a keyed unit: held, admitted, tallied, over.
func (p *part) applyKeyed(at int64, t Touch) {
	c := t.body()
	key := c.bytes()
	r := p.rows.Find(t.hash(), key)
	state := units.Free
	if r != units.None {
		state = p.rows.State(r)
	}
	switch state {
	case units.Open:
		p.follow(r, at, t, c)
	case units.Left:
		if p.rows.Flags(r)&rowLost != 0 {
			p.counts.Outside++
		} else {
			p.counts.Conflicting++
		}
	case units.Barred:
		p.counts.Outside++
	default: // not in the study now: new, waiting, or complete, with its row or without
		was := p.former(r, state, t.hash(), at)
		switch {
		case was.again == leftForGood:
			p.counts.Conflicting++
		case was.again == keptOut:
			p.counts.Outside++
		case t.Entry() && p.mayEnter(was.again, at):
			p.enter(r, state, at, t, key, c)
		default:
			p.hold(r, was, at, t, key, c)
		}
	}
}

// reenters is the time from which a complete unit may enter anew.
func (p *part) reenters(r units.Row) int64 {
	u := &p.s.Units
	if u.Never {
		return math.MaxInt64
	}
	return p.rows.Entry(r) + p.span() + int64(u.Again)
}

func (p *part) mayEnter(again, at int64) bool {
	u := &p.s.Units
	return at >= again && (u.Until == NoTime || at < u.Until)
}

// enter admits a unit, or keeps it out where its arm or time does.
func (p *part) enter(r units.Row, state units.State, at int64, t Touch, key []byte, c cursor) {
	u := &p.s.Units
	if u.From != NoTime && at < u.From {
		if r == units.None {
			r = p.rows.Insert(t.hash(), key, units.Barred)
		}
		p.drop(r)
		p.bar(r, at)
		p.counts.Outside++
		return
	}
	arm, known := p.readArm(&c)
	p.readFields(&c)
	if !known {
		p.counts.Outside++
		return
	}
	if p.refuses(t.hash()) {
		p.refuse(r, at)
		return
	}
	seg := p.segment(at, t.hash())
	if state == units.Complete {
		old := r
		r = p.rows.Renew(old, t.hash(), key) // the old row stays, for the sums that it is in
	} else if r == units.None {
		r = p.rows.Insert(t.hash(), key, units.Open)
	}
	p.admit(r, at, arm, seg)
	p.takePast(r, at)
	v := p.rows.Change(r)
	for i := len(p.s.Tallies); i < p.l.tallies; i++ {
		v[i] = c.float()
	}
	p.tallyAll(v, c)
	p.counts.Applied++
}

// bar keeps a unit out for good.
func (p *part) bar(r units.Row, at int64) {
	p.rows.Enter(r, at, 0, 0, 0)
	p.rows.SetState(r, units.Barred)
	if p.span() > 0 {
		p.queue.push(r)
	}
}

// follow takes an event of a unit whose follow-up runs.
func (p *part) follow(r units.Row, at int64, t Touch, c cursor) {
	matched, odd := false, false
	if t.Entry() {
		has := p.s.Units.Arm >= 0 && c.b[0] != 0
		arm, known := p.readArm(&c)
		if mine, _ := p.rows.Group(r); has && known && arm != mine {
			p.conflict(r, mine)
			return
		}
		// An arm that the study does not know, or none where the file says what an entry is: the
		// event can still be tallied, but it is no repeated entry.
		odd = !known && (has || p.s.Units.Entry != nil)
		p.readFields(&c)
		for range p.l.entryFields {
			c.float()
		}
	}
	n := c.byte()
	if n > 0 {
		p.changed.touch(p.rows, r, p.l)
		v := p.rows.Change(r)
		for range n {
			j := c.byte()
			x := c.float()
			if p.s.Tallies[j].Before == 0 {
				v[j] = tally(p.s.Tallies[j].Kind, v[j], x)
				matched = true
			}
		}
	}
	switch {
	case matched:
		p.counts.Applied++
	case n > 0 || odd:
		p.counts.Outside++ // it belongs to the past of a unit that has entered
	default:
		p.counts.Filtered++
	}
}

// conflict notes that a unit was seen in another arm.
func (p *part) conflict(r units.Row, mine uint8) {
	p.counts.Conflicting++
	if p.rows.Flags(r)&rowConflicted == 0 {
		p.rows.SetFlags(r, rowConflicted)
		p.byArm[mine].Conflicted++
	}
	if p.s.Units.Leave {
		p.changed.touch(p.rows, r, p.l)
		p.rows.SetState(r, units.Left)
	}
}

// tallyAll folds an entry's own tallies in; the past is over by then.
func (p *part) tallyAll(v []float64, c cursor) {
	for range c.byte() {
		j := c.byte()
		x := c.float()
		if p.s.Tallies[j].Before == 0 {
			v[j] = tally(p.s.Tallies[j].Kind, v[j], x)
		}
	}
}

func (p *part) applyLate(at int64, t Touch) {
	p.stir(at)
	if p.s.Units.Kind != Keyed {
		return
	}
	c := t.body()
	key := c.bytes()
	r := p.rows.Find(t.hash(), key)
	if r == units.None {
		return
	}
	switch s := p.rows.State(r); {
	case s != units.Open && s != units.Complete, p.rows.Flags(r)&rowLate != 0:
		return
	}
	if t.Entry() {
		if p.s.Units.Arm >= 0 {
			c.field()
		}
		p.readFields(&c)
		for range p.l.entryFields {
			c.float()
		}
	}
	if c.byte() == 0 {
		return
	}
	p.rows.SetFlags(r, rowLate)
	arm, _ := p.rows.Group(r)
	p.byArm[arm].Late++
}

// readArm reads an entry's arm. known is false where it is lacking or not declared.
func (p *part) readArm(c *cursor) (arm uint8, known bool) {
	if p.s.Units.Arm < 0 {
		return 0, true
	}
	name, ok := c.field()
	if !ok {
		return 0, false
	}
	if i, ok := p.arms.find(name); ok {
		return uint8(i), true
	}
	if len(p.s.Units.Arms) > 0 || len(p.arms.list) > math.MaxUint8 {
		return 0, false
	}
	return uint8(p.addArm(string(name))), true
}

// readFields reads an entry's segment fields into p.fields; nil where lacking.
func (p *part) readFields(c *cursor) {
	for i := range p.fields {
		f, ok := c.field()
		if ok && f == nil {
			f = []byte{}
		}
		p.fields[i] = f
	}
}

// segment numbers the segment in p.fields: 0 for none, which is also where a field is
// lacking, and where there are more than can be numbered.
func (p *part) segment(at int64, hash uint64) uint16 {
	if len(p.fields) == 0 {
		return 0
	}
	p.label = p.label[:0]
	for _, f := range p.fields {
		if f == nil {
			return 0
		}
		p.label = binary.AppendUvarint(p.label, uint64(len(f)))
		p.label = append(p.label, f...)
	}
	i, ok := p.segAt.find(p.label)
	if !ok {
		if len(p.segs) == math.MaxUint16 {
			return math.MaxUint16
		}
		i = p.segAt.add(string(p.label))
		seen := SegmentSeen{At: at, Hash: hash}
		for _, f := range p.fields {
			seen.Values = append(seen.Values, string(f))
		}
		p.segs = append(p.segs, seen)
	}
	return uint16(i + 1)
}
