package oracle

import (
	"cmp"
	"slices"
	"strings"
)

// buckets are units of event time, all fed by all partitions.
func (s *Study) buckets(events []Event, last int64) (units []*Unit, c Outcomes) {
	every := int64(s.Bucket)
	events = slices.Clone(events)
	slices.SortFunc(events, byTime)
	start := s.From.UnixNano()
	if s.From.IsZero() {
		if len(events) == 0 {
			return nil, c
		}
		start = floor(events[0].Time, every) + every
	}
	tallied := make([]bool, len(events))
	for at := start; at <= last; at += every {
		before, _ := slices.BinarySearchFunc(events, at, func(e Event, at int64) int { return cmp.Compare(e.Time, at) })
		u := &Unit{Entry: at, Complete: at+every <= last, Tallies: Tallies{}}
		for _, t := range s.Tallies {
			var values []float64
			for i, e := range events {
				if v, ok, _ := t.takes(e.Fields); ok && e.Time >= at && e.Time < at+every {
					values = append(values, v)
					tallied[i] = true
				}
			}
			t.settle(u.Tallies, values)
		}
		if u.Complete || slices.Contains(tallied[before:], true) {
			units = append(units, u)
		}
	}
	for i, e := range events {
		switch {
		case tallied[i]:
			c.Applied++
		case s.matches(e):
			c.Outside++
		default:
			c.Filtered++
		}
	}
	return units, c
}

// independent makes each event that the entry condition admits a unit.
func (s *Study) independent(f *File, events []Event) (units []*Unit, tied bool, c Outcomes) {
	events = slices.Clone(events)
	slices.SortFunc(events, byTime)
	for _, e := range events {
		early := !s.From.IsZero() && e.Time < s.From.UnixNano()
		tooLate := !s.Until.IsZero() && e.Time >= s.Until.UnixNano()
		switch {
		case s.isEntry(e) && !early && !tooLate:
			u := &Unit{Entry: e.Time, Complete: true, Tallies: Tallies{}, Fields: e.Fields, Segment: s.segment(e), first: e}
			for _, t := range s.Tallies {
				var values []float64
				if v, ok, _ := t.takes(e.Fields); ok {
					values = append(values, v)
				}
				t.settle(u.Tallies, values)
			}
			units = append(units, u)
			c.Applied++
		case s.isEntry(e) || s.matches(e):
			c.Outside++
		default:
			c.Filtered++
		}
	}
	return units, f.places(units), c
}

func byTime(a, b Event) int {
	return cmp.Or(cmp.Compare(a.Time, b.Time), strings.Compare(a.ID, b.ID),
		cmp.Compare(a.Part, b.Part), cmp.Compare(a.Pos, b.Pos))
}
