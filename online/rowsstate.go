package online

import (
	"cmp"
	"fmt"
	"strconv"

	"stillwell/online/moment"
	"stillwell/online/units"
	"stillwell/online/wire"
)

func (g *gone) bytes() int64 {
	return int64(cap(g.over.rows))*4 + g.marks.Bytes() + g.barred.Bytes()
}

// snapshot copies what has changed since the last one, or everything.
func (g *gone) snapshot(prefix string, all bool) []Page {
	var out []Page
	for _, m := range []struct {
		name  string
		marks *units.Marks
	}{{"marks/", &g.marks}, {"barred/", &g.barred}} {
		for _, c := range m.marks.Snapshot(all) {
			out = append(out, Page{prefix + m.name + strconv.Itoa(c.Page), c.Append})
		}
	}
	if g.dirty || all && len(g.frozen) > 0 {
		g.dirty = false
		var page wire.Writer
		g.encodeFrozen(&page)
		out = append(out, Page{prefix + "frozen", func(w *wire.Writer) { w.B = append(w.B, page.B...) }})
	}
	return out
}

func (g *gone) restore(pages map[string][]byte, prefix string, l *layout) error {
	if err := eachPage(pages, prefix+"marks/", g.marks.Restore); err != nil {
		return err
	}
	if err := eachPage(pages, prefix+"barred/", g.barred.Restore); err != nil {
		return err
	}
	b, ok := pages[prefix+"frozen"]
	if !ok {
		return nil
	}
	if err := g.decodeFrozen(b, l); err != nil {
		return fmt.Errorf("frozen sums: %w", err)
	}
	return nil
}

const frozenVersion = 1

func (g *gone) encodeFrozen(w *wire.Writer) {
	w.U64(frozenVersion)
	w.U64(uint64(len(g.frozen)))
	for _, f := range g.frozen {
		w.U8(f.key.arm)
		w.U64(uint64(f.key.seg))
		w.U8(f.key.power)
		b, _ := f.cell.AppendBinary(nil) // never fails
		w.Bytes(b)
	}
}

func (g *gone) decodeFrozen(b []byte, l *layout) error {
	r := wire.NewReader(b)
	if v := r.U64(); v != frozenVersion {
		r.Fail("version %d, want %d", v, frozenVersion)
	}
	g.at = map[sumsKey]int{}
	for range r.Count(4) {
		k := sumsKey{r.U8(), uint16(r.U64()), r.U8()}
		c, rest, err := moment.DecodeCell(l.shape, r.Bytes())
		if r.Err() != nil {
			break
		}
		if err != nil || len(rest) > 0 {
			return cmp.Or(err, wire.ErrMalformed)
		}
		g.at[k] = len(g.frozen)
		g.frozen = append(g.frozen, frozenSums{k, c})
	}
	return r.Done()
}

func (d *door) encode(w *wire.Writer) {
	w.U8(d.power)
	w.U64(uint64(d.next))
}

func (d *door) decode(r *wire.Reader) {
	d.power, d.next = r.U8(), int(r.U64())
	if d.power > mostPower || d.next < 0 {
		r.Fail("an admission probability of 2^-%d, halved next at %d units", d.power, d.next)
	}
}
