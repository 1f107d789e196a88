package online

import (
	"cmp"
	"math"
	"slices"

	"stillwell/online/moment"
	"stillwell/online/units"
)

// Bounded rows. Sums keep what they were given for good; a row is kept for the audit of
// the sums, and for telling which units carry an estimate. So the oldest rows of units whose
// time is over may go: a mark remembers until when the unit may not enter anew, and the
// unit's vector joins the frozen sums, so that rows and frozen sums are together all that
// the desk was ever given.

// Times of marks of units that never enter anew; that of complete ones is math.MaxInt64.
const (
	leftForGood = math.MaxInt64 - 1 // for a contrary entry
	keptOut     = math.MaxInt64 - 2 // entered too early, or lost to a gap
)

// gone is what a part keeps of units whose rows have been dropped.
type gone struct {
	over   queue        // rows whose time is over, in order of that time and the keyed hash
	marks  units.Marks  // may enter anew some day
	barred units.Marks  // never
	frozen []frozenSums // in order of first dropped
	at     map[sumsKey]int
	dirty  bool // frozen has changed since the last snapshot
}

// frozenSums are those of the dropped units of one arm, segment and weight.
type frozenSums struct {
	key  sumsKey
	cell *moment.Cell
}

// sumsKey is whose sums they are, by the shard's numbers.
type sumsKey struct {
	arm   uint8
	seg   uint16
	power uint8
}

// endOf is when a row's time is over.
func (p *part) endOf(r units.Row) int64 { return p.rows.Entry(r) + p.span() }

// age is the place of a row in the order in which they are dropped.
type age struct {
	end  int64
	hash uint64
}

func (a age) compare(b age) int {
	return cmp.Or(cmp.Compare(a.end, b.end), cmp.Compare(a.hash, b.hash))
}

// never is the age of no row.
var never = age{math.MaxInt64, math.MaxUint64}

func (p *part) age(r units.Row) age { return age{p.endOf(r), p.rows.Hash(r)} }

// oldest is the age of the row to be dropped next.
func (p *part) oldest() age {
	if r, ok := p.gone.over.first(); ok {
		return p.age(r)
	}
	return never
}

// line orders the rows that have got in line to be dropped since there were so many; all are
// later than those.
func (p *part) line(from int) {
	if late := p.gone.over.rows[from:]; len(late) > 1 {
		slices.SortFunc(late, func(a, b units.Row) int { return p.age(a).compare(p.age(b)) })
	}
}

// kept is the number of rows that count against limits.rows.
func (p *part) kept() int { return p.rows.Len() - p.rows.Count(units.Waiting) }

// forget drops the oldest row whose time is over.
func (p *part) forget() {
	r, _ := p.gone.over.pop()
	switch p.rows.State(r) {
	case units.Complete:
		p.freeze(r)
		p.mark(r, p.reenters(r))
		if _, held := p.rows.Holds(r); held {
			p.rows.SetState(r, units.Waiting) // for the events held for its next entry
			return
		}
	case units.Past:
		p.freeze(r)
	case units.Left:
		if p.rows.Flags(r)&rowLost == 0 {
			p.mark(r, leftForGood)
		} else {
			p.mark(r, keptOut)
		}
	case units.Barred:
		p.mark(r, keptOut)
	}
	p.rows.Remove(r)
}

func (p *part) mark(r units.Row, until int64) {
	arm, _ := p.rows.Group(r)
	switch {
	case p.s.Units.Kind != Keyed: // no event of a bucket that is over will come
	case until >= keptOut:
		p.gone.barred.Put(p.rows.Hash(r), arm, until)
	default:
		p.gone.marks.Put(p.rows.Hash(r), arm, until)
	}
}

// former is what is known of a unit's time in the study, when it is not in it.
type former struct {
	again int64 // it may enter from then on; NoTime where it never was in, or that is past and forgotten
	arm   uint8
}

func (p *part) former(r units.Row, state units.State, hash uint64, at int64) former {
	if state == units.Complete {
		arm, _ := p.rows.Group(r)
		return former{p.reenters(r), arm}
	}
	if arm, until, ok := p.gone.barred.Find(hash); ok {
		return former{until, arm}
	}
	if arm, until, ok := p.gone.marks.Find(hash); ok && until > at {
		return former{until, arm}
	}
	return former{again: NoTime}
}

// freeze adds a row's unit to the frozen sums.
func (p *part) freeze(r units.Row) {
	p.l.vector(p.rows.Values(r), p.z)
	c := p.frozenAt(p.sumsOf(r))
	if c.Units() == 0 {
		_ = c.SetOrigin(p.z) // refuses only what Add refuses too
	}
	c.Add(p.z)
	p.gone.dirty = true
}

func (p *part) sumsOf(r units.Row) sumsKey {
	arm, seg := p.rows.Group(r)
	return sumsKey{arm, seg, p.rows.Power(r)}
}

func (p *part) frozenAt(k sumsKey) *moment.Cell {
	g := &p.gone
	if i, ok := g.at[k]; ok {
		return g.frozen[i].cell
	}
	if g.at == nil {
		g.at = map[sumsKey]int{}
	}
	g.at[k] = len(g.frozen)
	g.frozen = append(g.frozen, frozenSums{k, moment.NewCell(p.l.shape)})
	return g.frozen[g.at[k]].cell
}

// trim drops the oldest rows of a study, over all shards, until no more than so many are kept,
// or none is left whose time is over.
func trim(parts []*part, limit int) {
	rows := 0
	for _, p := range parts {
		rows += p.kept()
	}
	if rows <= limit {
		return
	}
	var ages [Shards]age
	for k, p := range parts {
		ages[k] = p.oldest()
	}
	for ; rows > limit; rows-- {
		next := 0
		for k := range parts {
			if ages[k].compare(ages[next]) < 0 {
				next = k
			}
		}
		if ages[next] == never {
			return
		}
		parts[next].forget()
		ages[next] = parts[next].oldest()
	}
}
