package online

import (
	"math"

	"stillwell/online/moment"
	"stillwell/online/units"
)

// A Recount is what a shard's rows say the sums of its units are, with those of units whose rows
// are gone: made anew, for the desk to compare with the sums that it keeps.
type Recount struct {
	parts []recount
}

type recount struct {
	arms []string
	segs []SegmentSeen
	sums map[sumsKey]*recounted
}

// recounted are sums of the units of one arm, segment and weight.
type recounted struct {
	complete, open *moment.Cell
}

// Recount adds every unit of the shard up. It is valid at a step's end only, when what has
// been applied is what the desk was given; it changes nothing, so that shards can be counted
// at the same time.
//
//	cost  0.1 us a row for one score, more with the number of moments; nothing is kept between calls
func (sh *Shard) Recount() Recount {
	var out Recount
	for _, p := range sh.parts {
		out.parts = append(out.parts, recount{p.arms.list, p.segs, p.recount()})
	}
	return out
}

func (p *part) recount() map[sumsKey]*recounted {
	out := map[sumsKey]*recounted{}
	at := func(k sumsKey) *recounted {
		c := out[k]
		if c == nil {
			c = &recounted{moment.NewCell(p.l.shape), moment.NewCell(p.l.shape)}
			out[k] = c
		}
		return c
	}
	for _, f := range p.gone.frozen {
		must(at(f.key).complete.Merge(f.cell))
	}
	// Units touched since the step's end count as they were then.
	before := map[units.Row]int{}
	for i, r := range p.changed.rows {
		before[r] = i
	}
	z := make([]float64, p.l.width)
	p.rows.Each(func(r units.Row) {
		state := p.rows.State(r)
		complete := state == units.Complete || state == units.Past
		i, changed := before[r]
		switch {
		case changed && !p.changed.had[i]:
			return // it has entered since
		case changed:
			copy(z, p.changed.old[i*p.l.width:])
		case complete || state == units.Open:
			p.l.vector(p.rows.Values(r), z)
		default:
			return
		}
		c := at(p.sumsOf(r))
		cell := c.open
		if complete {
			cell = c.complete
		}
		if cell.Units() == 0 {
			_ = cell.SetOrigin(z)
		}
		cell.Add(z)
	})
	return out
}

// An Audited study has had its sums compared with its rows.
type Audited struct {
	Study string
	Units int64 // compared: complete, open, and those whose rows are gone
	// Off is the largest relative difference between a sum that the desk keeps and the same sum
	// made anew: of means, co-moments and third moments, relative to their scales. It is zero to
	// the last digits; anything above 1e-9 means that sums or rows are damaged.
	Off float64
}

// Audit compares the desk's sums with those of all shards, recounted at the same step's end.
// A study in which each event is a unit keeps no rows, and has nothing to compare.
func (d *Desk) Audit(recounts []Recount) []Audited {
	var out []Audited
	for i, l := range d.studies {
		a := Audited{Study: l.s.Name}
		if l.s.Units.Kind != EventsAlone {
			a.Units, a.Off = l.audit(recounts, i)
		}
		out = append(out, a)
	}
	return out
}

// audit gathers the recounts as the desk has its groups, and compares.
func (l *ledger) audit(recounts []Recount, study int) (n int64, off float64) {
	made := map[groupKey]*remade{}
	at := func(arm, place int) *remade {
		k := groupKey{arm, place}
		if made[k] == nil {
			made[k] = &remade{newStrata(l.l.shape), newStrata(l.l.shape)}
		}
		return made[k]
	}
	for shard := range recounts {
		part := &recounts[shard].parts[study]
		for k, c := range part.sums {
			if c.complete.Units()+c.open.Units() == 0 {
				continue
			}
			arm, place := l.arms.at[part.arms[k.arm]], 0
			if k.seg > 0 {
				place = l.place(l.valuesOf(part.segs, k.seg))
			}
			at(arm, 0).take(k.power, c)
			if place > 0 {
				at(arm, place).take(k.power, c)
			}
		}
	}
	if l.bucket.filled > 0 {
		empty := &recounted{moment.NewCell(l.l.shape), moment.NewCell(l.l.shape)}
		for range l.bucket.filled {
			empty.complete.Add(l.bucket.zero)
		}
		at(0, 0).take(0, empty)
	}
	none := &remade{newStrata(l.l.shape), newStrata(l.l.shape)}
	for k, g := range l.groups {
		s := made[k]
		if s == nil {
			s = none
		}
		off = max(off, differ(g.complete, s.complete), differ(g.all, s.all))
		if k.place == 0 {
			n += s.all.Units()
		}
		delete(made, k)
	}
	for _, s := range made {
		if s.all.Units() > 0 {
			off = 1 // units that the desk knows nothing of
		}
	}
	return n, off
}

// remade are the sums of a group, made anew.
type remade struct{ complete, all *strata }

func (s *remade) take(power uint8, c *recounted) {
	s.complete.take(power, c.complete)
	s.all.take(power, c.complete)
	s.all.take(power, c.open)
}

// take adds a cell of units of one weight, about the origin of the first.
func (s *strata) take(power uint8, c *moment.Cell) {
	if c.Units() == 0 {
		return
	}
	if to := s.at(power); to.Units() == 0 {
		to.CopyFrom(c)
	} else {
		must(to.Merge(c))
	}
}

// differ is the largest relative difference between sums kept and made anew, over strata. The
// latter have at least the moments of the former.
func differ(kept, made *strata) (off float64) {
	for power := range max(len(kept.cells), len(made.cells)) {
		k, m := kept.stratum(power), made.stratum(power)
		if k == nil || m == nil {
			if k != nil && k.Units() > 0 || m != nil && m.Units() > 0 {
				return 1
			}
			continue
		}
		off = max(off, differCells(k, m))
	}
	return off
}

func (s *strata) stratum(power int) *moment.Cell {
	if power < len(s.cells) {
		return s.cells[power]
	}
	return nil
}

func differCells(kept, made *moment.Cell) float64 {
	n := kept.Units()
	if n != made.Units() {
		return 1
	}
	if n == 0 {
		return 0
	}
	shape := kept.Shape()
	size, spread := make([]float64, shape.Components()), make([]float64, shape.Components())
	var off float64
	compare := func(a, b, scale float64) {
		if d := math.Abs(a - b); d > 0 {
			off = max(off, d/scale)
		} else if math.IsNaN(d) {
			off = 1
		}
	}
	for i := range size {
		if made.Shape().Pair(i, i) >= 0 {
			spread[i] = math.Sqrt(made.Co(i, i) / float64(n))
		}
		size[i] = math.Hypot(made.Mean(i), spread[i])
		spread[i] = max(spread[i], 1e-9*size[i]) // equal scores have no spread but for rounding
		compare(kept.Mean(i), made.Mean(i), size[i])
	}
	count := float64(n)
	for _, p := range shape.Pairs() {
		compare(kept.Co(p[0], p[1]), made.Co(p[0], p[1]), count*spread[p[0]]*spread[p[1]])
	}
	for _, t := range shape.Triples() {
		compare(kept.Third(t[0], t[1], t[2]), made.Third(t[0], t[1], t[2]), count*spread[t[0]]*spread[t[1]]*spread[t[2]])
	}
	return off
}
