package online

import "stillwell/online/units"

// Gap tells the shard that events between two times are missing. Units open then, and units
// that enter then, leave as lost: what they did is not known. Buckets that the span touches
// are left out. Events that are units are missing as units, and that is all.
func (sh *Shard) Gap(from, to int64) {
	for _, p := range sh.parts {
		p.gap(from, to)
	}
}

func (p *part) gap(from, to int64) {
	if p.s.Units.Kind == EventsAlone {
		return
	}
	p.stir(from)
	p.lostTo = max(p.lostTo, to)
	p.rows.Each(func(r units.Row) {
		if p.rows.State(r) == units.Open && (p.span() == 0 || p.rows.Entry(r)+p.span() > from) && p.rows.Entry(r) <= to {
			p.lose(r)
		}
	})
}

// lose takes an open unit out of the study.
func (p *part) lose(r units.Row) {
	p.changed.touch(p.rows, r, p.l)
	p.rows.SetState(r, units.Left)
	p.rows.SetFlags(r, rowLost)
	arm, _ := p.rows.Group(r)
	p.byArm[arm].Lost++
}

// Gap tells the desk the same.
func (d *Desk) Gap(from, to int64) {
	for _, l := range d.studies {
		l.gap(from, to)
	}
}

// gap notes a span in which events are known to be missing, and leaves the buckets that it
// touches out.
func (l *ledger) gap(from, to int64) {
	if l.gapped == [2]int64{} {
		l.gapped = [2]int64{from, to}
	} else {
		l.gapped = [2]int64{min(l.gapped[0], from), max(l.gapped[1], to)}
	}
	if l.s.Units.Kind == Buckets && from >= l.bucket.next {
		l.missing = append(l.missing, [2]int64{from, to})
	}
}

// missed tells whether the bucket that begins then is touched by a gap.
func (l *ledger) missed(begin int64) bool {
	for _, g := range l.missing {
		if begin <= g[1] && begin+int64(l.s.Units.Every) > g[0] {
			return true
		}
	}
	return false
}

func (l *ledger) gapText() []string {
	if l.gapped == [2]int64{} {
		return nil
	}
	return []string{timeText(l.gapped[0]), timeText(l.gapped[1])}
}
