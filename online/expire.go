package online

import (
	"math"

	"stillwell/online/units"
)

// wheel keeps the rows that hold events, by when the first of them will be too old for
// any entry; a row stands in it once.
type wheel struct {
	grain int64
	slots map[int64][]units.Row
	next  int64 // slots before it have been seen to
	any   bool
}

const rowWaits = 1 << 7 // in the wheel

func (p *part) wait(r units.Row) {
	if p.rows.Flags(r)&rowWaits != 0 {
		return
	}
	first, ok := p.rows.Holds(r)
	if !ok {
		return
	}
	p.rows.SetFlags(r, rowWaits)
	if p.wheel.slots == nil {
		p.wheel.slots = map[int64][]units.Row{}
		p.wheel.grain = max(1, p.longest()/32)
	}
	slot := p.slot(first)
	if !p.wheel.any || slot < p.wheel.next {
		p.wheel.next, p.wheel.any = slot, true
	}
	p.wheel.slots[slot] = append(p.wheel.slots[slot], r)
}

func (p *part) slot(first int64) int64 { return floorDiv(first+p.longest(), p.wheel.grain) + 1 }

// longest is how far back the past of an entry can reach.
func (p *part) longest() int64 {
	var d int64
	for _, b := range p.l.before {
		t := &p.s.Tallies[b]
		d = max(d, int64(t.Before)+int64(t.Grain))
	}
	return d
}

// expire lets held events that are too old at now fall outside.
func (p *part) expire(now int64) {
	w := &p.wheel
	for ; len(w.slots) > 0 && w.next*w.grain <= now; w.next++ {
		rows := w.slots[w.next]
		delete(w.slots, w.next)
		for _, r := range rows {
			first, held := p.rows.Holds(r)
			if !held || p.rows.Flags(r)&rowWaits == 0 || p.slot(first) != w.next {
				continue // the unit that waited here is gone, and its row may be another's
			}
			p.rows.ClearFlags(r, rowWaits)
			p.fade(r, now)
		}
	}
	if len(w.slots) == 0 {
		w.any = false
	}
}

func (p *part) fade(r units.Row, now int64) {
	p.rows.Take(r, func(at int64, vals []float64, count int) bool {
		for i, b := range p.l.before {
			if !math.IsNaN(vals[i]) && at >= p.from(b, now) {
				return false
			}
		}
		p.counts.Outside += int64(count)
		return true
	})
	if _, held := p.rows.Holds(r); held {
		p.wait(r)
	} else if p.rows.State(r) == units.Waiting {
		p.rows.Remove(r)
	}
}

// expireAll lets everything held fall outside.
func (p *part) expireAll() {
	if len(p.l.before) == 0 {
		return
	}
	var gone []units.Row
	p.rows.Each(func(r units.Row) {
		p.drop(r)
		if p.rows.State(r) == units.Waiting {
			gone = append(gone, r)
		}
	})
	for _, r := range gone {
		p.rows.Remove(r)
	}
	p.wheel = wheel{}
}
