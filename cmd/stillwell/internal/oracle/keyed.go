package oracle

import (
	"cmp"
	"math"
	"slices"
	"strings"
	"time"
)

// Outcomes are the counters of a study.
type Outcomes struct{ Applied, Filtered, Outside, Waiting, Conflicting, Unsampled int }

// A Unit is one that entered and did not leave, with all that was counted for it.
type Unit struct {
	Key      string
	Entry    int64
	Arm      string
	Segment  string // texts of the fields of By; pooled ones are Pool
	Complete bool   // at the end of the stream
	Tallies  Tallies
	Fields   Fields // of the entry event

	first Event
	left  bool
}

// Everyone and Pool are segments that no field names.
const (
	Everyone = "\x00everyone"
	Pool     = "\x00pool"
)

const defaultAgain = 90 * 24 * time.Hour

// keyed follows units that a field names.
func (s *Study) keyed(f *File, events []Event, last int64) (units []*Unit, tied bool, c Outcomes) {
	byKey := map[string][]Event{}
	for _, e := range events {
		if e.Fields.lacks(s.Key) {
			c.Filtered++
			continue
		}
		k := keyText(e.Fields[s.Key])
		byKey[k] = append(byKey[k], e)
	}
	for key, own := range byKey {
		slices.SortFunc(own, s.canonical)
		for _, u := range s.follow(own, &c) {
			u.Key = key
			u.Complete = s.FollowUp > 0 && u.Entry+int64(s.FollowUp) <= last
			units = append(units, u)
		}
	}
	slices.SortFunc(units, func(a, b *Unit) int { return s.canonical(a.first, b.first) })
	tied = f.places(units)
	return slices.DeleteFunc(units, func(u *Unit) bool { return u.left }), tied, c
}

func (s *Study) isEntry(e Event) bool { return s.Entry == nil || s.Entry.Holds(e.Fields) }

// canonical is the order of events: time; entries first; id; partition; position.
func (s *Study) canonical(a, b Event) int {
	entry := func(e Event) int {
		if s.isEntry(e) {
			return 0
		}
		return 1
	}
	return cmp.Or(cmp.Compare(a.Time, b.Time), cmp.Compare(entry(a), entry(b)),
		strings.Compare(a.ID, b.ID), cmp.Compare(a.Part, b.Part), cmp.Compare(a.Pos, b.Pos))
}

// follow goes through one key's events in their order. It finds who enters when and where, then
// counts for each what falls into its windows, then says what became of each event.
func (s *Study) follow(events []Event, c *Outcomes) (rows []*Unit) {
	const (
		ordinary = iota
		admits
		contrary // while its unit is open, or its unit has left
		refused  // an entry that can be none: out of from and until, without a declared arm
		repeated // of a unit that has entered, in the same arm
	)
	role := make([]int, len(events))
	var row *Unit
	out, left := false, false
	for i, e := range events {
		if left {
			role[i] = contrary
			continue
		}
		if !s.isEntry(e) {
			continue
		}
		arm, known := s.arm(e)
		switch {
		case row == nil && !s.From.IsZero() && e.Time < s.From.UnixNano():
			role[i], out = refused, true // whatever its arm
		case s.Entry == nil && s.Arm != "" && e.Fields.lacks(s.Arm) && row != nil && !s.done(row, e.Time):
			// Where any event may admit, one without an arm is an event like others.
		case out || !known:
			role[i] = refused
		case row != nil && !s.done(row, e.Time):
			role[i] = repeated
			if arm != row.Arm {
				role[i], left = contrary, s.Leave
				row.left = left
			}
		case row != nil && !s.anew(row, e.Time):
			role[i] = repeated
			if arm != row.Arm {
				role[i] = refused
			}
		case !s.Until.IsZero() && e.Time >= s.Until.UnixNano():
			if role[i] = refused; row != nil && arm == row.Arm {
				role[i] = repeated
			}
		default:
			role[i] = admits
			row = &Unit{Entry: e.Time, Arm: arm, Fields: e.Fields, first: e, Segment: s.segment(e), Tallies: Tallies{}}
			rows = append(rows, row)
		}
	}
	tallied := make([]bool, len(events))
	for _, r := range rows {
		for _, t := range s.Tallies {
			s.count(r, &t, events, func(i int) bool { return role[i] != contrary }, tallied)
		}
	}
	for i, e := range events {
		switch {
		case role[i] == contrary:
			c.Conflicting++
		case role[i] == admits || tallied[i]:
			c.Applied++
		case s.matches(e) || role[i] == refused:
			c.Outside++
		default:
			c.Filtered++
		}
	}
	return rows
}

// matches says whether a tally would take something of the event, were it at the right time.
func (s *Study) matches(e Event) bool {
	return slices.ContainsFunc(s.Tallies, func(t Tally) bool { _, ok, _ := t.takes(e.Fields); return ok })
}

func (s *Study) arm(e Event) (arm string, known bool) {
	if s.Arm == "" {
		return "", true
	}
	if e.Fields.lacks(s.Arm) {
		return "", false
	}
	arm = keyText(e.Fields[s.Arm])
	return arm, s.Arms == nil || slices.Contains(s.Arms, arm)
}

func (s *Study) done(u *Unit, at int64) bool {
	return s.FollowUp > 0 && at >= u.Entry+int64(s.FollowUp)
}

// anew says whether the unit of a complete row may enter anew at a time.
func (s *Study) anew(u *Unit, at int64) bool {
	again := s.Again
	if again == 0 {
		again = defaultAgain
	}
	return !s.Never && at >= u.Entry+int64(s.FollowUp)+int64(again)
}

// count gives a unit one tally over the events, which are in canonical order, and notes which
// of them were tallied.
func (s *Study) count(u *Unit, t *Tally, events []Event, may func(int) bool, tallied []bool) {
	from, until := u.Entry, int64(math.MaxInt64)
	if s.FollowUp > 0 {
		until = u.Entry + int64(s.FollowUp)
	}
	if t.Before > 0 {
		from, until = u.Entry-int64(t.Before), u.Entry
		if t.Grain > 0 {
			from = floor(from, int64(t.Grain))
		}
	}
	var values []float64
	for i, e := range events {
		if v, ok, _ := t.takes(e.Fields); ok && e.Time >= from && e.Time < until && may(i) {
			values = append(values, v)
			tallied[i] = true
		}
	}
	t.settle(u.Tallies, values)
}

// settle makes a tally of the values it took.
func (t *Tally) settle(into Tallies, values []float64) {
	sum := 0.
	for _, v := range values {
		sum += v
	}
	switch {
	case t.Kind == Count || t.Kind == Sum:
		into[t.Name] = sum
	case t.Kind == Any:
		into[t.Name] = min(sum, 1)
	case len(values) == 0:
	case t.Kind == Min:
		into[t.Name] = slices.Min(values)
	case t.Kind == Max:
		into[t.Name] = slices.Max(values)
	case t.Kind == First:
		into[t.Name] = values[0]
	case t.Kind == Last:
		into[t.Name] = values[len(values)-1]
	}
}

func floor(t, grain int64) int64 {
	k := t / grain
	if t%grain < 0 {
		k--
	}
	return k * grain
}

// segment is empty where the entry event lacks one of the fields.
func (s *Study) segment(e Event) string {
	if len(s.By) == 0 || slices.ContainsFunc(s.By, e.Fields.lacks) {
		return ""
	}
	texts := make([]string, len(s.By))
	for i, name := range s.By {
		texts[i] = keyText(e.Fields[name])
	}
	return strings.Join(texts, "\x1f")
}

// places gives segments their places in order of entry, and pools those that find none. It says
// whether units that entered at the same time vied for a place: nothing tells whose it is.
func (f *File) places(units []*Unit) (tied bool) {
	limit := f.Segments
	if limit == 0 {
		limit = 200
	}
	placed := map[string]int64{}
	full := int64(math.MinInt64) // when the last place was given
	for _, u := range units {
		if _, ok := placed[u.Segment]; ok || u.Segment == "" {
			continue
		}
		if len(placed) < limit {
			placed[u.Segment], full = u.Entry, u.Entry
			continue
		}
		tied = tied || u.Entry == full
		u.Segment = Pool
	}
	return tied
}
