package online

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"stillwell/online/units"
	"stillwell/online/wire"
)

// A Page is a named piece of state. Encode may be called later and elsewhere: it holds a
// copy of its own.
type Page struct {
	Name   string
	Encode func(w *wire.Writer)
}

// Snapshot copies what has changed in the shard since the last one, or everything. It is
// to be taken at a step's end.
func (sh *Shard) Snapshot(all bool) []Page {
	var out []Page
	for _, p := range sh.parts {
		prefix := fmt.Sprintf("%s/shard/%d/", p.s.Name, sh.index)
		var head wire.Writer
		p.encode(&head)
		out = append(out, Page{prefix + "head", func(w *wire.Writer) { w.B = append(w.B, head.B...) }})
		for _, c := range p.rows.Snapshot(all) {
			out = append(out, Page{prefix + "rows/" + strconv.Itoa(c.Page), c.Append})
		}
		out = append(out, p.gone.snapshot(prefix, all)...)
	}
	return out
}

// StudyOf is the study that a page belongs to.
func StudyOf(page string) string {
	study, _, _ := strings.Cut(page, "/")
	return study
}

// Restore sets the shard to what its pages held. Pages of other shards and studies are passed
// over; a study without any begins anew.
func (sh *Shard) Restore(pages map[string][]byte) error {
	for _, p := range sh.parts {
		prefix := fmt.Sprintf("%s/shard/%d/", p.s.Name, sh.index)
		head, ok := pages[prefix+"head"]
		if !ok {
			continue
		}
		err := eachPage(pages, prefix+"rows/", p.rows.Restore)
		if err == nil {
			err = p.gone.restore(pages, prefix, p.l)
		}
		if err != nil {
			return fmt.Errorf("state of study %s, shard %d: %w", p.s.Name, sh.index, err)
		}
		p.rows.Finish()
		r := wire.NewReader(head)
		p.decode(r)
		if err := r.Done(); err != nil {
			return fmt.Errorf("state of study %s, shard %d: %w", p.s.Name, sh.index, err)
		}
		p.resume()
	}
	return nil
}

// eachPage hands over the numbered pages below a prefix in ascending order.
func eachPage(pages map[string][]byte, prefix string, f func(int, []byte) error) error {
	var places []int
	for name := range pages {
		if at, ok := strings.CutPrefix(name, prefix); ok {
			k, err := strconv.Atoi(at)
			if err != nil {
				return fmt.Errorf("page %s: %w", name, err)
			}
			places = append(places, k)
		}
	}
	slices.Sort(places)
	for _, k := range places {
		if err := f(k, pages[prefix+strconv.Itoa(k)]); err != nil {
			return err
		}
	}
	return nil
}

const partVersion = 3

// encode writes what is not in rows: counts, names, and the rows that have changed since
// the step's end.
func (p *part) encode(w *wire.Writer) {
	w.U64(partVersion)
	w.I64(p.start)
	w.I64(p.clock)
	w.I64(p.lostTo)
	w.I64(p.stirred)
	p.door.encode(w)
	for _, n := range []int64{p.counts.Applied, p.counts.Filtered, p.counts.Outside, p.counts.Conflicting, p.counts.Unsampled} {
		w.I64(n)
	}
	w.U64(uint64(len(p.arms.list)))
	for i, name := range p.arms.list {
		w.String(name)
		c := p.byArm[i]
		for _, n := range []int64{c.Entered, c.Conflicted, c.Late, c.Lost} {
			w.I64(n)
		}
	}
	w.U64(uint64(len(p.segs)))
	for i, s := range p.segs {
		w.String(p.segAt.list[i])
		w.I64(s.At)
		w.F64(math.Float64frombits(s.Hash))
		w.U64(uint64(len(s.Values)))
		for _, v := range s.Values {
			w.String(v)
		}
	}
	w.U64(uint64(len(p.changed.rows)))
	for i, r := range p.changed.rows {
		w.U64(uint64(r))
		w.Bool(p.changed.had[i])
		for _, v := range p.changed.old[i*p.l.width : (i+1)*p.l.width] {
			w.F64(v)
		}
	}
}

func (p *part) decode(r *wire.Reader) {
	if v := r.U64(); v != partVersion {
		r.Fail("version %d, want %d", v, partVersion)
	}
	p.start, p.clock, p.lostTo, p.stirred = r.I64(), r.I64(), r.I64(), r.I64()
	p.door.decode(r)
	p.swept = p.door.power
	for _, n := range []*int64{&p.counts.Applied, &p.counts.Filtered, &p.counts.Outside, &p.counts.Conflicting, &p.counts.Unsampled} {
		*n = r.I64()
	}
	p.arms, p.byArm = names{}, nil
	for range r.Count(5) {
		i := p.addArm(r.String())
		c := &p.byArm[i]
		for _, n := range []*int64{&c.Entered, &c.Conflicted, &c.Late, &c.Lost} {
			*n = r.I64()
		}
	}
	p.segAt, p.segs = names{}, nil
	for range r.Count(11) {
		p.segAt.add(r.String())
		s := SegmentSeen{At: r.I64(), Hash: math.Float64bits(r.F64())}
		for range r.Count(1) {
			s.Values = append(s.Values, r.String())
		}
		p.segs = append(p.segs, s)
	}
	for range r.Count(2 + 8*p.l.width) {
		row := r.U64()
		if row >= uint64(p.rows.Cap()) {
			r.Fail("row %d of %d", row, p.rows.Cap())
			return
		}
		p.changed.rows = append(p.changed.rows, units.Row(row))
		p.changed.had = append(p.changed.had, r.Bool())
		for range p.l.width {
			p.changed.old = append(p.changed.old, r.F64())
		}
	}
}

// resume finds again what follows from the rows: which are open, in order of entry, whose time
// is over, and which hold events.
func (p *part) resume() {
	var open, over []units.Row
	p.rows.Each(func(r units.Row) {
		switch state := p.rows.State(r); {
		case state == units.Waiting || p.span() == 0:
		case p.endOf(r) > p.clock:
			open = append(open, r)
		default:
			over = append(over, r)
		}
		if _, held := p.rows.Holds(r); held {
			p.rows.ClearFlags(r, rowWaits)
			p.wait(r)
		}
	})
	slices.SortStableFunc(open, func(a, b units.Row) int {
		switch x, y := p.rows.Entry(a), p.rows.Entry(b); {
		case x < y:
			return -1
		case x > y:
			return 1
		}
		return 0
	})
	p.queue = queue{rows: open}
	p.gone.over = queue{rows: over}
	p.line(0)
}
