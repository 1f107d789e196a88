package online

import (
	"cmp"
	"fmt"
	"maps"
	"slices"
	"strings"

	"stillwell/online/boundary"
	"stillwell/online/moment"
	"stillwell/online/wire"
)

// Snapshot copies what has changed at the desk since the last one, or everything.
func (d *Desk) Snapshot(all bool) []Page {
	var out []Page
	for _, l := range d.studies {
		out = append(out, l.snapshot(all)...)
	}
	return out
}

// Restore sets the desk to what its pages held; a study without any begins anew.
func (d *Desk) Restore(pages map[string][]byte) error {
	for _, l := range d.studies {
		if err := l.restore(pages); err != nil {
			return fmt.Errorf("state of study %s: %w", l.s.Name, err)
		}
	}
	return nil
}

func (l *ledger) headName() string { return l.s.Name + "/desk/head" }

func (l *ledger) groupName(k groupKey) string {
	return fmt.Sprintf("%s/desk/group/%d/%d", l.s.Name, k.arm, k.place)
}

func (l *ledger) snapshot(all bool) []Page {
	var head wire.Writer
	l.encode(&head)
	out := []Page{{l.headName(), func(w *wire.Writer) { w.B = append(w.B, head.B...) }}}
	for _, k := range l.order {
		g := l.groups[k]
		if !g.unsaved && !all {
			continue
		}
		g.unsaved = false
		var page wire.Writer
		g.encode(&page)
		out = append(out, Page{l.groupName(k), func(w *wire.Writer) { w.B = append(w.B, page.B...) }})
	}
	return out
}

func (l *ledger) restore(pages map[string][]byte) error {
	head, ok := pages[l.headName()]
	if !ok {
		return nil
	}
	r := wire.NewReader(head)
	l.decode(r)
	if err := r.Done(); err != nil {
		return err
	}
	prefix := l.s.Name + "/desk/group/"
	for name, b := range pages {
		at, ok := strings.CutPrefix(name, prefix)
		if !ok {
			continue
		}
		var k groupKey
		if _, err := fmt.Sscanf(at, "%d/%d", &k.arm, &k.place); err != nil || k.arm < 0 || k.arm >= len(l.arms.list) || k.place < 0 || k.place > len(l.places.list) {
			return fmt.Errorf("page %s: no such group", name)
		}
		if err := l.group(k.arm, k.place).decode(b, l); err != nil {
			return fmt.Errorf("page %s: %w", name, err)
		}
	}
	return nil
}

func (g *group) encode(w *wire.Writer) {
	g.complete.encode(w)
	g.all.encode(w)
	for _, h := range g.heavy {
		b, _ := h.AppendBinary(nil)
		w.Bytes(b)
	}
	for _, win := range g.windows {
		win.encode(w)
	}
	if g.series != nil {
		g.series.encode(w)
	}
}

func (g *group) decode(b []byte, l *ledger) error {
	r := wire.NewReader(b)
	g.complete.decode(r)
	g.all.decode(r)
	for i := range g.heavy {
		el := &l.l.estimates[i]
		got, rest, err := moment.DecodeHeavy(el.heavyWidth(), heaviestKept, r.Bytes())
		if err != nil || len(rest) > 0 {
			return fmt.Errorf("heaviest units: %w", cmp.Or(err, wire.ErrMalformed))
		}
		g.heavy[i] = got
	}
	for _, win := range g.windows {
		win.decode(r)
	}
	if g.series != nil {
		g.series.decode(r)
	}
	return r.Done()
}

const ledgerVersion = 2

func (l *ledger) encode(w *wire.Writer) {
	w.U64(ledgerVersion)
	w.I64(l.first)
	w.I64(l.bucket.next)
	w.U64(uint64(l.bucket.run))
	w.I64(l.bucket.filled)
	l.door.encode(w)
	w.I64(l.gapped[0])
	w.I64(l.gapped[1])
	w.U64(uint64(len(l.missing)))
	for _, g := range l.missing {
		w.I64(g[0])
		w.I64(g[1])
	}
	w.U64(uint64(len(l.arms.list)))
	for _, a := range l.arms.list {
		w.String(a)
	}
	w.U64(uint64(len(l.places.list)))
	for i, label := range l.places.list {
		w.String(label)
		w.U64(uint64(len(l.values[i])))
		for _, v := range l.values[i] {
			w.String(v)
		}
	}
	voices := slices.SortedFunc(maps.Keys(l.voices), func(a, b voiceKey) int {
		return cmp.Or(cmp.Compare(a.estimate, b.estimate), cmp.Compare(a.arm, b.arm), cmp.Compare(a.place, b.place))
	})
	w.U64(uint64(len(voices)))
	for _, k := range voices {
		v := l.voices[k]
		w.U64(uint64(k.estimate))
		w.U64(uint64(k.arm))
		w.U64(uint64(k.place))
		writeSequence(w, v.seq)
		w.Bool(v.keep != nil)
		w.U64(uint64(len(v.keep)))
		for _, c := range v.keep {
			w.U64(uint64(c))
		}
		w.Bytes(v.last)
	}
	hearings := slices.SortedFunc(maps.Keys(l.hearings), func(a, b hearingKey) int {
		return cmp.Or(cmp.Compare(a.watch, b.watch), cmp.Compare(a.arm, b.arm), cmp.Compare(a.place, b.place))
	})
	w.U64(uint64(len(hearings)))
	for _, k := range hearings {
		h := l.hearings[k]
		w.U64(uint64(k.watch))
		w.U64(uint64(k.arm))
		w.U64(uint64(k.place))
		writeSequence(w, h.seq)
		w.String(h.state)
		w.Bytes(h.last)
		w.String(h.raised)
	}
	l.encodeChecks(w)
}

func (l *ledger) decode(r *wire.Reader) {
	if v := r.U64(); v != ledgerVersion {
		r.Fail("version %d, want %d", v, ledgerVersion)
		return
	}
	l.first, l.bucket.next, l.bucket.run, l.bucket.filled = r.I64(), r.I64(), int(r.U64()), r.I64()
	if l.first != NoTime {
		next := l.bucket.next
		l.beginBuckets(l.first)
		l.bucket.next = next
	}
	l.door.decode(r)
	l.gapped = [2]int64{r.I64(), r.I64()}
	for range r.Count(2) {
		l.missing = append(l.missing, [2]int64{r.I64(), r.I64()})
	}
	l.arms, l.counts, l.baseline = names{}, nil, -1
	for range r.Count(1) {
		l.addArm(r.String())
	}
	l.places, l.values = names{}, nil
	for range r.Count(2) {
		l.places.add(r.String())
		var values []string
		for range r.Count(1) {
			values = append(values, r.String())
		}
		l.values = append(l.values, values)
	}
	for range r.Count(6) {
		k := voiceKey{int(r.U64()), int(r.U64()), int(r.U64())}
		v := &voice{seq: readSequence(r)}
		if kept, n := r.Bool(), r.Count(1); kept {
			v.keep = make([]int, 0, n)
			for range n {
				v.keep = append(v.keep, int(r.U64()))
			}
		}
		v.last = slices.Clone(r.Bytes())
		if r.Err() != nil || k.estimate >= len(l.s.Estimates) {
			r.Fail("no estimate %d", k.estimate)
			return
		}
		l.voices[k] = v
	}
	for range r.Count(7) {
		k := hearingKey{int(r.U64()), int(r.U64()), int(r.U64())}
		h := &hearing{seq: readSequence(r), state: r.String(), last: slices.Clone(r.Bytes()), raised: r.String()}
		if r.Err() != nil || k.watch >= len(l.s.Watches) || h.seq == nil {
			r.Fail("no watch %d", k.watch)
			return
		}
		l.hearings[k] = h
	}
	l.decodeChecks(r)
}

func writeSequence(w *wire.Writer, s *boundary.Sequence) {
	w.Bool(s != nil)
	if s != nil {
		b, _ := s.AppendBinary(nil) // never fails
		w.Bytes(b)
	}
}

func readSequence(r *wire.Reader) *boundary.Sequence {
	if !r.Bool() {
		return nil
	}
	s, rest, err := boundary.DecodeSequence(r.Bytes())
	if err != nil || len(rest) > 0 {
		r.Fail("a sequence that cannot be: %v", err)
		return nil
	}
	return &s
}
