package online

import (
	"math"

	"stillwell/online/units"
)

// Bounded memory without bias. A keyed unit is admitted when a hash of its key falls below
// the study's threshold, which is 1 at first and halved whenever too many units are open. Whom
// it lets in depends on nothing but the key, so those let in stand for all, each for as many
// as the inverse of the admission probability at its entry: its weight, 2^power. The threshold
// never rises, so that a unit once refused is refused for good, and need not be remembered.

// A door is where admission to a study stands.
type door struct {
	power uint8 // the admission probability is 2^-power
	next  int   // units open at which it is halved next
}

// mostPower bounds weights, so that their third powers times those of scores stay finite.
const mostPower = 40

// meet halves the admission probability if too many units are open: first at the limit, and
// then each time they have taken another fifth of the room that was left up to twice the limit,
// which they never fill. To halve at every step at which the limit is exceeded would
// be for good, and far too much: units stay open for their follow-up, however few come after
// them. Once fewer than half the limit are open, the limit counts anew.
func (d *door) meet(open, limit int) {
	if d.next == 0 || open < limit/2 {
		d.next = limit
	}
	if open >= d.next && d.power < mostPower {
		d.power++
		d.wait(open, limit)
	}
}

// wait leaves what is open now as it is.
func (d *door) wait(open, limit int) { d.next = open + max(1, (2*limit-open)/5) }

// probability is that of admission.
func (d *door) probability() float64 { return math.Ldexp(1, -int(d.power)) }

// refuses tells whether a unit is not admitted.
func (d *door) refuses(hash uint64) bool { return d.power > 0 && lot(hash)>>(64-d.power) != 0 }

// lot is a unit's hash mixed once more, so that who is admitted says nothing about shards
// and the order in which units are added, which the hash itself decides.
//
//	source  the finalizer of SplitMix64, Steele, Lea, Flood 2014, OOPSLA (from memory)
func lot(hash uint64) uint64 {
	hash += 0x9e3779b97f4a7c15
	hash = (hash ^ hash>>30) * 0xbf58476d1ce4e5b9
	hash = (hash ^ hash>>27) * 0x94d049bb133111eb
	return hash ^ hash>>31
}

// shardLimit is when a shard halves the probability on its own, in the midst of a step and
// for those who enter after: at twice its part of the limit, and a little more where that is
// small. That hangs on the shard's own events in their order, and on nothing else. A step in
// which everyone comes at once so ends with at most four times the limit open, and all shards
// then go on with the least probability that any has come to.
func shardLimit(units int) int { return units/(Shards/2) + 32 }

// held is the number of rows that count against the limit.
func (p *part) held() int { return p.rows.Count(units.Open) + p.rows.Count(units.Waiting) }

// refuses tells whether a unit that has no row among those open or waiting gets none.
func (p *part) refuses(hash uint64) bool {
	if p.limits.Units > 0 {
		p.door.meet(p.held(), shardLimit(p.limits.Units))
	}
	return p.door.refuses(hash)
}

// refuse counts an entry that is not admitted, and what was held for it.
func (p *part) refuse(r units.Row, at int64) {
	p.counts.Unsampled++
	if r != units.None {
		p.release(r, at)
	}
}

// release lets go of what is held for a unit that will never enter. What was too old for any
// entry already is outside, as if it had never been asked whether there was room.
func (p *part) release(r units.Row, now int64) {
	if len(p.l.before) > 0 {
		p.rows.Take(r, func(at int64, vals []float64, count int) bool {
			for i, b := range p.l.before {
				if !math.IsNaN(vals[i]) && at >= p.from(b, now) {
					p.counts.Unsampled += int64(count)
					return true
				}
			}
			p.counts.Outside += int64(count)
			return true
		})
	}
	p.rows.ClearFlags(r, rowWaits)
	if p.rows.State(r) == units.Waiting {
		p.rows.Remove(r)
	}
}

// narrow takes the study's admission probability over, at a step's end, and lets go of what is
// held for units that it keeps out.
func (p *part) narrow(power uint8, now int64) {
	p.door.power = max(p.door.power, power)
	if p.swept == p.door.power {
		return
	}
	p.swept = p.door.power
	if len(p.l.before) == 0 {
		return
	}
	var out []units.Row
	p.rows.Each(func(r units.Row) {
		if _, held := p.rows.Holds(r); held && p.door.refuses(p.rows.Hash(r)) {
			out = append(out, r)
		}
	})
	for _, r := range out {
		p.release(r, now)
	}
}

// admit halves the study's admission probability if too many units are open, for those who
// enter after the step; where a shard has had to, for all shards.
func (l *ledger) admit(sums []Summary, study int) {
	limit := l.plan.Limits.Units
	if l.s.Units.Kind != Keyed || limit <= 0 {
		return
	}
	open, before := 0, l.door.power
	for k := range sums {
		p := &sums[k].Parts[study]
		open += p.Open + p.Waiting
		l.door.power = max(l.door.power, p.Power)
	}
	if l.door.power > before {
		l.door.wait(open, limit)
	} else {
		l.door.meet(open, limit)
	}
	l.narrowed = l.door.power > before
}

// Bound keeps the shards within the plan's limits. It is called at the end of every step, but
// for a last view, when the desk has evaluated it and before anything else is applied.
func (d *Desk) Bound(T int64, shards []*Shard) {
	for i, l := range d.studies {
		parts := make([]*part, len(shards))
		for k, sh := range shards {
			parts[k] = sh.parts[i]
			parts[k].narrow(l.door.power, T)
			parts[k].gone.marks.Expire(T)
		}
		if limit := d.plan.Limits.Rows; limit > 0 {
			trim(parts, limit)
		}
	}
}
