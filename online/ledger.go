package online

import (
	"cmp"
	"encoding/binary"
	"math"
	"slices"

	"stillwell/online/moment"
)

// A ledger is the desk's side of one study: its groups' sums, and what was said last.
type ledger struct {
	plan *Plan
	s    *Study
	l    *layout

	arms   names
	maps   [Shards]mapping // each shard's numbers to the desk's
	places names           // segments by label; place i+1
	values [][]string      // each place's field values
	groups map[groupKey]*group
	order  []groupKey // in order of arm and place, kept sorted
	counts []ArmCounts
	done   []unit // scratch of a step

	first    int64 // earliest delivered event
	bucket   buckets
	baseline int // arm, -1 if there is none
	voices   map[voiceKey]*voice
	hearings map[hearingKey]*hearing
	gapped   [2]int64   // the latest span in which events are missing; zero if there is none
	missing  [][2]int64 // gaps that touch buckets still to come
	checks   checks
	door     door
	narrowed bool      // admission has been halved in this step
	recheck  bool      // everything is to be evaluated, whether or not its sums have changed
	scratch  []float64 // a unit's vector in terms of an estimate
}

type groupKey struct{ arm, place int }

// group is a cell of the study: the units of one arm in one segment, or in all.
type group struct {
	complete *strata
	all      *strata         // provisional: every unit that has entered
	heavy    []*moment.Heavy // by estimate
	series   *series         // nil where no estimate rests on one
	windows  []*window       // of each length that an estimate asks for
	slid     bool            // a window has moved in this step
	grown    bool            // complete changed in this step
	moved    bool            // all changed in this step
	unsaved  bool            // changed since the last snapshot
}

// mapping turns a shard's numbers of arms and segments into the desk's.
type mapping struct{ arms, segs []int }

func newLedger(p *Plan, s *Study) *ledger {
	l := &ledger{plan: p, s: s, l: s.layout, groups: map[groupKey]*group{}, baseline: -1, first: NoTime}
	if s.Units.Arm < 0 {
		l.addArm("all")
	}
	for _, a := range s.Units.Arms {
		l.addArm(a.Name)
	}
	l.bucket.next = math.MaxInt64
	l.checks = l.newChecks()
	l.startSpeaking()
	return l
}

func (l *ledger) addArm(name string) int {
	l.counts = append(l.counts, ArmCounts{})
	i := l.arms.add(name)
	if l.s.Units.Arm >= 0 && name == l.s.Units.Baseline {
		l.baseline = i
	}
	return i
}

func (l *ledger) begin(at int64) {
	if l.first != NoTime {
		return
	}
	l.first = at
	l.beginBuckets(at)
}

// name gives arms and segments that shards have seen for the first time their places:
// arms by name, segments in order of entry.
func (l *ledger) name(sums []Summary, study int) {
	var arms []string
	var segs []SegmentSeen
	for k := range sums {
		p, m := &sums[k].Parts[study], &l.maps[k]
		for _, a := range p.Arms[len(m.arms):] {
			if _, ok := l.arms.at[a]; !ok {
				arms = append(arms, a)
			}
		}
		segs = append(segs, p.Segs[len(m.segs):]...)
	}
	slices.Sort(arms)
	for _, a := range slices.Compact(arms) {
		l.addArm(a)
	}
	slices.SortFunc(segs, func(a, b SegmentSeen) int {
		return cmp.Or(cmp.Compare(a.At, b.At), cmp.Compare(a.Hash, b.Hash))
	})
	for _, s := range segs {
		l.place(s.Values)
	}
	for k := range sums {
		p, m := &sums[k].Parts[study], &l.maps[k]
		for _, a := range p.Arms[len(m.arms):] {
			m.arms = append(m.arms, l.arms.at[a])
		}
		for _, s := range p.Segs[len(m.segs):] {
			m.segs = append(m.segs, l.place(s.Values))
		}
	}
}

// Pooled is the value of every field of the segment in which those over the limit are
// counted together.
const Pooled = "(others)"

// place is the number of a segment, from 1; all over the limit share one.
func (l *ledger) place(values []string) int {
	var label []byte
	for _, v := range values {
		label = binary.AppendUvarint(label, uint64(len(v)))
		label = append(label, v...)
	}
	if i, ok := l.places.at[string(label)]; ok {
		return i + 1
	}
	if limit := l.plan.Limits.Segments; limit > 0 && len(l.places.list) >= limit {
		pooled := make([]string, len(values))
		for i := range pooled {
			pooled[i] = Pooled
		}
		if len(l.places.list) == limit {
			l.places.add(Pooled)
			l.values = append(l.values, pooled)
		}
		return limit + 1
	}
	l.values = append(l.values, values)
	return l.places.add(string(label)) + 1
}

func (l *ledger) armOf(shard int, arm uint8) int { return l.maps[shard].arms[arm] }

func (l *ledger) placeOf(shard int, seg uint16) int {
	switch segs := l.maps[shard].segs; {
	case seg == 0:
		return 0
	case int(seg) > len(segs):
		return l.place(l.valuesOf(nil, seg))
	default:
		return segs[seg-1]
	}
}

// valuesOf are the field values of a shard's segment; empty where there are more than it can number.
func (l *ledger) valuesOf(segs []SegmentSeen, seg uint16) []string {
	if int(seg) > len(segs) {
		return make([]string, len(l.s.Units.By))
	}
	return segs[seg-1].Values
}

func (l *ledger) segment(place int) Segment {
	seg := Segment{}
	if place > 0 {
		for i, v := range l.values[place-1] {
			seg = append(seg, Pair{l.s.Units.ByNames[i], v})
		}
	}
	return seg
}

func (l *ledger) group(arm, place int) *group {
	k := groupKey{arm, place}
	g, ok := l.groups[k]
	if !ok {
		g = &group{complete: newStrata(l.l.shape), all: newStrata(l.l.provisional), heavy: l.newHeavy(), windows: l.newWindows()}
		if l.wantsSeries() {
			g.series = newSeries(l.l.width)
		}
		l.groups[k] = g
		i, _ := slices.BinarySearchFunc(l.order, k, func(a, b groupKey) int {
			return cmp.Or(cmp.Compare(a.place, b.place), cmp.Compare(a.arm, b.arm))
		})
		l.order = slices.Insert(l.order, i, k)
	}
	return g
}

// add joins a completed unit to its groups.
func (l *ledger) add(u *unit) {
	l.join(l.group(u.arm, 0), u)
	if u.place > 0 {
		l.join(l.group(u.arm, u.place), u)
	}
}

func (l *ledger) join(g *group, u *unit) {
	sums := g.complete.at(u.Power)
	if sums.Units() == 0 {
		// About the first unit's scores, sums of far-off values lose nothing.
		_ = sums.SetOrigin(u.z) // refuses only what Add refuses too
	}
	sums.Add(u.z)
	l.weigh(g, u)
	for _, w := range g.windows {
		w.add(u)
	}
	if g.series != nil {
		g.series.addUnit(u, l.s.Units.Kind == Buckets)
	}
	g.grown, g.unsaved = true, true
}

// shift moves a group's provisional sums.
func (l *ledger) shift(arm, place int, d Delta) {
	g := l.group(arm, place)
	if err := g.all.at(d.Power).Apply(d.Sums); err != nil {
		panic(err) // both were made by this package, of one layout
	}
	g.moved, g.unsaved = true, true
}

// count adds the shards' counts of units up.
func (l *ledger) count(sums []Summary, study int) {
	for i := range l.counts {
		l.counts[i] = ArmCounts{}
	}
	for k := range sums {
		for a, c := range sums[k].Parts[study].ByArm {
			t := &l.counts[l.armOf(k, uint8(a))]
			t.Entered += c.Entered
			t.Conflicted += c.Conflicted
			t.Late += c.Late
			t.Lost += c.Lost
		}
	}
}
