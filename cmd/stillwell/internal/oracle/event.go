package oracle

import (
	"bytes"
	"encoding/json"
	"io"
	"math"
	"slices"
	"time"
	"unicode/utf8"
)

// An Event is a delivered one.
type Event struct {
	Fields    Fields
	Time      int64 // Unix nanoseconds
	ID        string
	Part, Pos int // partition, and place in it
}

// Verdicts are the counters of the stream.
type Verdicts struct{ Read, Delivered, Malformed, Late, Duplicate, Ahead int }

var (
	earliest = time.Date(2000, 1, 1, 0, 0, 0, 0, time.UTC)
	latest   = time.Date(2100, 1, 1, 0, 0, 0, 0, time.UTC)
)

// read gives a line's event, or says that it is malformed.
func (f *File) read(line []byte) (e Event, malformed bool) {
	if !utf8.Valid(line) {
		return e, true
	}
	d := json.NewDecoder(bytes.NewReader(line))
	d.UseNumber()
	if err := d.Decode(&e.Fields); err != nil || e.Fields == nil {
		return e, true
	}
	if _, err := d.Token(); err != io.EOF {
		return e, true
	}
	t, ok := f.time(e.Fields[f.Stream.Time])
	if !ok || t.Before(earliest) || !t.Before(latest) {
		return e, true
	}
	e.Time = t.UnixNano()
	if f.Stream.ID != "" && !e.Fields.lacks(f.Stream.ID) {
		e.ID = keyText(e.Fields[f.Stream.ID])
	}
	for i := range f.Studies {
		for j := range f.Studies[i].Tallies {
			if _, _, fault := f.Studies[i].Tallies[j].takes(e.Fields); fault {
				return e, true
			}
		}
	}
	return e, false
}

func (f *File) time(v any) (time.Time, bool) {
	if f.Stream.Unix == 0 {
		s, ok := v.(string)
		if !ok {
			return time.Time{}, false
		}
		t, err := time.Parse(time.RFC3339, s)
		return t, err == nil
	}
	n, ok := v.(json.Number)
	if !ok {
		return time.Time{}, false
	}
	k, err := n.Int64()
	return time.Unix(0, k*int64(f.Stream.Unix)), err == nil
}

// takes is what a tally takes of an event, apart from whose it is and when it came.
func (t *Tally) takes(f Fields) (v float64, ok, fault bool) {
	if t.When != nil && !t.When.Holds(f) {
		return 0, false, false
	}
	if t.Kind == Count || t.Kind == Any {
		return 1, true, false
	}
	v, absent, fault := t.Value.of(f)
	return v, !absent && !fault, fault
}

// arrive gives every line its verdict, partition by partition: what one brings has no bearing on
// another's lateness. It gives the delivered events, the least of the partitions' watermarks,
// and the largest event time.
func (f *File) arrive(parts [][]byte) (events []Event, c Verdicts, mark, last int64) {
	remember := int64(max(f.Stream.Remember, f.Stream.Lateness))
	mark, last = math.MaxInt64, math.MinInt64
	var punctual []Event // neither malformed nor late: delivered or duplicate
	for p, text := range parts {
		furthest, any := int64(math.MinInt64), false
		known := map[string][]int64{} // times of the punctual events so far, by id
		for pos, line := range bytes.Split(text, []byte("\n")) {
			if len(bytes.TrimSpace(line)) == 0 {
				continue
			}
			c.Read++
			e, malformed := f.read(line)
			if malformed {
				c.Malformed++
				continue
			}
			e.Part, e.Pos = p, pos
			if any && e.Time < furthest-int64(f.Stream.Lateness) {
				if slices.ContainsFunc(known[e.ID], func(t int64) bool { return t >= furthest-remember }) {
					c.Duplicate++
				} else {
					c.Late++
				}
				continue
			}
			punctual = append(punctual, e)
			if e.ID != "" {
				known[e.ID] = append(known[e.ID], e.Time)
			}
			furthest, any = max(furthest, e.Time), true
		}
		if any {
			mark, last = min(mark, furthest-int64(f.Stream.Lateness)), max(last, furthest)
		}
	}
	slices.SortFunc(punctual, byTime)
	given := map[string]int64{} // time of the last event delivered with an id
	for _, e := range punctual {
		if t, ok := given[e.ID]; ok && e.ID != "" && e.Time-t <= remember {
			c.Duplicate++
			continue
		}
		given[e.ID] = e.Time
		c.Delivered++
		events = append(events, e)
	}
	return events, c, mark, last
}
