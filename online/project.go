package online

import (
	"encoding/binary"
	"fmt"
	"math"

	"stillwell/online/expr"
)

// A TypeFault says why an event cannot count: it would tally something that is no
// finite number. Such an event is malformed as a whole, whatever its unit.
type TypeFault struct {
	Study, Tally string
	Status       expr.Status
}

func (f *TypeFault) Error() string {
	what := "a value that is no number"
	if f.Status == expr.NotFinite {
		what = "a value that is not finite"
	}
	return fmt.Sprintf("study %s would tally %s as %s", f.Study, what, f.Tally)
}

// Project appends to dst what the event means to each study (see Touch), nothing
// where it means nothing. It looks at no unit, so any number of goroutines may project
// events in any order.
func (p *Plan) Project(rec expr.Record, at int64, dst []byte) ([]byte, *TypeFault) {
	start := len(dst)
	for i := range p.Studies {
		var fault *TypeFault
		if dst, fault = p.Studies[i].project(i, rec, at, dst); fault != nil {
			return dst[:start], fault
		}
	}
	return dst, nil
}

func (s *Study) project(index int, rec expr.Record, at int64, dst []byte) ([]byte, *TypeFault) {
	u := &s.Units
	start := len(dst)
	dst = append(dst, 0, 0, 0, 0, byte(index), 0)
	entry := u.Entry == nil || u.Entry.Match(rec)
	lacks := false
	switch u.Kind {
	case Keyed:
		key := &rec[u.Key]
		if key.Kind == expr.Absent {
			lacks = true
			break
		}
		dst = binary.LittleEndian.AppendUint64(dst, s.keyed.sum(key.Text))
		dst = binary.AppendUvarint(dst, uint64(len(key.Text)))
		dst = append(dst, key.Text...)
	case Buckets:
		dst = binary.LittleEndian.AppendUint64(dst, s.keyed.number(uint64(floorDiv(at, int64(u.Every)))))
		dst = append(dst, 0)
		entry = false
	case EventsAlone:
		dst = binary.LittleEndian.AppendUint64(dst, s.eventHash(rec, at))
		dst = append(dst, 0)
	}
	if entry && !lacks {
		dst[start+5] = touchEntry
		if u.Arm >= 0 {
			dst = appendField(dst, &rec[u.Arm])
		}
		for _, slot := range u.By {
			dst = appendField(dst, &rec[slot])
		}
		for _, slot := range s.layout.entryFields {
			v := &rec[slot]
			x := math.NaN()
			switch {
			case v.Kind == expr.Absent:
			case v.Kind != expr.Number:
				return dst[:start], &TypeFault{s.Name, "adjust", expr.WrongType}
			case math.IsInf(v.Num, 0):
				return dst[:start], &TypeFault{s.Name, "adjust", expr.NotFinite}
			default:
				x = v.Num
			}
			dst = binary.LittleEndian.AppendUint64(dst, math.Float64bits(x))
		}
	}
	counter := len(dst)
	dst = append(dst, 0)
	for j := range s.Tallies {
		t := &s.Tallies[j]
		if t.When != nil && !t.When.Match(rec) {
			continue
		}
		x := 1.0
		if t.Value != nil {
			v, status := t.Value.Eval(rec)
			switch status {
			case expr.Missing:
				continue
			case expr.Present:
				x = v
			default:
				return dst[:start], &TypeFault{s.Name, t.Name, status}
			}
		}
		dst[counter]++
		dst = append(dst, byte(j))
		dst = binary.LittleEndian.AppendUint64(dst, math.Float64bits(x))
	}
	if lacks || !entry && dst[counter] == 0 {
		return dst[:start], nil
	}
	binary.LittleEndian.PutUint32(dst[start:], uint32(len(dst)-start))
	return dst, nil
}

// eventHash spreads events that are units over the shards and orders equal times;
// it depends on what the event says, not on where it stood.
func (s *Study) eventHash(rec expr.Record, at int64) uint64 {
	h := s.keyed.number(uint64(at))
	for i := range rec {
		if rec[i].Kind != expr.Absent {
			h = fold(h^s.keyed.sum(rec[i].Text), 0x9e3779b97f4a7c15+uint64(i)<<1)
		}
	}
	return h
}

func appendField(dst []byte, v *expr.Value) []byte {
	if v.Kind == expr.Absent {
		return append(dst, 0)
	}
	dst = binary.AppendUvarint(dst, uint64(len(v.Text))+1)
	return append(dst, v.Text...)
}

func floorDiv(a, b int64) int64 {
	q := a / b
	if a%b < 0 {
		q--
	}
	return q
}
