package online

import (
	"math"

	"stillwell/online/units"
)

// hold keeps an event of a unit that has not entered for the tallies over its past, if
// an entry can still come that it would count for.
func (p *part) hold(r units.Row, was former, at int64, t Touch, key []byte, c cursor) {
	repeated := false // the entry of a complete unit, once more
	if t.Entry() {
		repeated = was.again != NoTime
		if p.s.Units.Arm >= 0 {
			name, _ := c.field()
			repeated = repeated && string(name) == p.arms.list[was.arm]
		}
		p.readFields(&c)
		for range p.l.entryFields {
			c.float()
		}
	}
	any := false
	for i := range p.past {
		p.past[i] = math.NaN()
	}
	n := c.byte()
	for range n {
		j := c.byte()
		x := c.float()
		for i, b := range p.l.before {
			if b == j && p.mayCount(was.again, at, b) {
				p.past[i] = x
				any = true
			}
		}
	}
	if (any || was.again == NoTime) && p.refuses(t.hash()) {
		p.counts.Unsampled++ // whether or not it has tried to enter is not remembered
		return
	}
	if !any {
		if repeated && n == 0 {
			p.counts.Filtered++
		} else {
			p.counts.Outside++
		}
		return
	}
	if r == units.None {
		r = p.rows.Insert(t.hash(), key, units.Waiting)
	}
	fold, at := p.folding(at)
	p.rows.Hold(r, at, p.past, fold)
	p.wait(r)
}

// mayCount tells whether an entry can still come whose past, for a tally, holds at.
func (p *part) mayCount(again, at int64, tally int) bool {
	u := &p.s.Units
	if u.Entry == nil && again == NoTime {
		return false // its first event would have been its entry
	}
	if u.Until != NoTime && at >= u.Until {
		return false
	}
	return again == NoTime || p.from(tally, again) <= at
}

// from is where the past of an entry at that time begins, for a tally.
func (p *part) from(tally int, entry int64) int64 {
	t := &p.s.Tallies[tally]
	if entry == math.MaxInt64 {
		return entry
	}
	start := entry - int64(t.Before)
	if t.Grain > 0 {
		start = floorDiv(start, int64(t.Grain)) * int64(t.Grain)
	}
	return start
}

// folding says how held events are kept: with one grain for all tallies over the past,
// as partial sums of a grain; else each for itself.
func (p *part) folding(at int64) (func(dst, src []float64), int64) {
	g := p.s.Tallies[p.l.before[0]].Grain
	for _, b := range p.l.before[1:] {
		if p.s.Tallies[b].Grain != g {
			g = 0
		}
	}
	if g == 0 {
		return nil, at
	}
	return func(dst, src []float64) {
		for i, b := range p.l.before {
			if math.IsNaN(src[i]) {
				continue
			}
			if k := p.s.Tallies[b].Kind; math.IsNaN(dst[i]) {
				dst[i] = partial(k, src[i])
			} else {
				dst[i] = mergeTally(k, dst[i], partial(k, src[i]))
			}
		}
	}, floorDiv(at, int64(g)) * int64(g)
}

// partial is the tally of one value alone; for a count or any, src is 1 already.
func partial(k TallyKind, x float64) float64 { return x }

// mergeTally joins two tallies of the same kind, the later one second.
func mergeTally(k TallyKind, a, b float64) float64 {
	switch k {
	case Count, SumOf:
		return a + b
	case Min:
		return min(a, b)
	case Max:
		return max(a, b)
	case First:
		return a
	case Last:
		return b
	default: // Any
		return 1
	}
}

// takePast tallies the events held for a unit that has just entered.
func (p *part) takePast(r units.Row, entry int64) {
	if len(p.l.before) == 0 {
		return
	}
	v := p.rows.Change(r)
	p.rows.Take(r, func(at int64, vals []float64, count int) bool {
		applied := false
		for i, b := range p.l.before {
			x := vals[i]
			if math.IsNaN(x) || at < p.from(b, entry) || at >= entry {
				continue
			}
			applied = true
			if k := p.s.Tallies[b].Kind; math.IsNaN(v[b]) {
				v[b] = x
			} else {
				v[b] = mergeTally(k, v[b], x)
			}
		}
		if applied {
			p.counts.Applied += int64(count)
		} else {
			p.counts.Outside += int64(count)
		}
		return true
	})
}

// drop lets a row's held events fall outside.
func (p *part) drop(r units.Row) {
	if len(p.l.before) == 0 {
		return
	}
	p.rows.Take(r, func(_ int64, _ []float64, count int) bool {
		p.counts.Outside += int64(count)
		return true
	})
}
