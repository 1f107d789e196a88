package online

import (
	"math"
	"slices"
)

// LongestSilence is how many time buckets in a row may be empty; more are a gap in the
// stream, not zeros.
const LongestSilence = 10_000

// buckets is where a study of time buckets stands: shards know only the buckets that had
// events, and the desk fills the others in.
type buckets struct {
	next int64 // start of the next bucket that counts; far off before the stream begins
	run  int   // empty buckets counted in a row
	zero []float64

	filled int64 // empty buckets counted in all: no shard has a row of them
}

func (l *ledger) beginBuckets(at int64) {
	u := &l.s.Units
	if u.Kind != Buckets {
		return
	}
	every := int64(u.Every)
	l.bucket.next = (floorDiv(at, every) + 1) * every
	if u.From != NoTime {
		l.bucket.next = ceilTo(u.From, every)
	}
	values := make([]float64, l.l.tallies)
	for i := range values {
		values[i] = math.NaN()
		if i < len(l.s.Tallies) {
			values[i] = initial(l.s.Tallies[i].Kind)
		}
	}
	l.bucket.zero = make([]float64, l.l.width)
	l.l.vector(values, l.bucket.zero)
}

func ceilTo(t, every int64) int64 { return -floorDiv(-t, every) * every }

// due is when something becomes complete or leaves a window without any event.
func (l *ledger) due() (at int64, ok bool) {
	at, ok = l.bucketDue()
	for _, g := range l.groups {
		for _, w := range g.windows {
			if t, has := w.due(); has && (!ok || t < at) {
				at, ok = t, true
			}
		}
	}
	return at, ok
}

// bucketDue is when the next bucket ends, whether or not it has events.
func (l *ledger) bucketDue() (int64, bool) {
	u := &l.s.Units
	b := &l.bucket
	if u.Kind != Buckets || b.next == math.MaxInt64 || b.run >= LongestSilence || u.Until != NoTime && b.next >= u.Until {
		return 0, false
	}
	// Buckets before the stream's first event, which units.from may ask for, are known with it.
	return max(b.next+int64(u.Every), l.first), true
}

// addBuckets adds the completed buckets in order, and the empty ones between and after
// them up to T.
func (l *ledger) addBuckets(T int64, done []unit) {
	every := int64(l.s.Units.Every)
	for i := range done {
		begin := done[i].At - every
		l.fill(begin)
		l.add(&done[i])
		l.bucket.next, l.bucket.run = begin+every, 0
	}
	l.missing = slices.DeleteFunc(l.missing, func(g [2]int64) bool { return g[1] < l.bucket.next })
	end := floorDiv(T, every) * every
	if until := l.s.Units.Until; until != NoTime {
		end = min(end, ceilTo(until, every))
	}
	if l.bucket.next < end {
		l.fill(end)
	}
}

// fill counts the buckets from the next up to end as empty, unless that makes too many
// in a row: then they are a gap.
func (l *ledger) fill(end int64) {
	b := &l.bucket
	every := int64(l.s.Units.Every)
	n := (end - b.next) / every
	if n <= 0 {
		return
	}
	if int64(b.run)+n > LongestSilence {
		l.gap(b.next, end)
		b.next, b.run = end, LongestSilence
		return
	}
	for ; b.next < end; b.next += every {
		if l.missed(b.next) {
			continue
		}
		u := unit{Done: Done{At: b.next + every, Hash: l.s.keyed.number(uint64(floorDiv(b.next, every)))}, z: b.zero}
		l.add(&u)
		g := l.group(0, 0)
		g.all.at(0).Add(u.z)
		g.moved, g.unsaved = true, true
		b.filled++
	}
	b.run += int(n)
}
