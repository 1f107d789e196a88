package online

import (
	"fmt"
	"os"
	"runtime"
	"slices"
	"testing"
	"time"

	"stillwell/online/units"
)

// TestOldestRowsGoFirst: over all shards, in order of completion and then of the hash.
func TestOldestRowsGoFirst(t *testing.T) {
	b := newBerth(t, Limits{Rows: 300}, nil)
	const n = 500
	for who := range n {
		b.event(int64(who/60), who, true, float64(who))
	}
	b.step(3600 + n)
	type over struct {
		end  int64
		hash uint64
	}
	var kept, all []over
	for _, sh := range b.shards {
		p := sh.parts[0]
		p.rows.Each(func(r units.Row) { kept = append(kept, over{p.endOf(r), p.rows.Hash(r)}) })
	}
	for who := range n {
		all = append(all, over{(3600 + int64(who/60)) * int64(time.Second), b.plan.Studies[0].keyed.sum(fmt.Appendf(nil, "p-%d", who))})
	}
	byAge := func(a, b over) int {
		if a.end != b.end {
			return int(a.end - b.end)
		}
		if a.hash < b.hash {
			return -1
		}
		return 1
	}
	slices.SortFunc(all, byAge)
	slices.SortFunc(kept, byAge)
	if !slices.Equal(kept, all[n-300:]) {
		t.Errorf("%d rows kept, and not the last 300", len(kept))
	}
	if off := b.audit(); off > 1e-14 {
		t.Errorf("sums are off by %g", off)
	}
}

// TestBytesAUnit: what a unit costs beside its key and the eight bytes of each tally.
func TestBytesAUnit(t *testing.T) {
	n := 200_000
	if os.Getenv("STILLWELL_LONG") == "1" {
		n = 1_000_000
	}
	heap := func() uint64 {
		var m runtime.MemStats
		runtime.GC()
		runtime.GC()
		runtime.ReadMemStats(&m)
		return m.HeapAlloc
	}
	four := func(s *Study) {
		for len(s.Tallies) < 4 {
			s.Tallies = append(s.Tallies, Tally{Name: fmt.Sprint("t", len(s.Tallies)), Kind: Count})
		}
		s.Tallies[1].Before, s.Estimates[0].Adjust = 0, nil
	}
	before := heap()
	b := newBerth(t, Limits{}, four)
	keys := 0
	for who := range n {
		b.event(int64(who/200), who, true, 1)
		keys += len(fmt.Sprintf("p-%d", who))
		if who%12_000 == 11_999 {
			b.step(int64(who/200) + 1)
		}
	}
	b.step(int64(n)/200 + 60)
	open := heap()
	for i := range int64(4) {
		b.step(int64(n)/200 + 7200 + 60*i) // the first in which all become complete leaves buffers of its own
	}
	complete := heap()
	var told int64
	for _, sh := range b.shards {
		told += sh.Kept(0).Bytes
	}
	each := func(bytes uint64) float64 { return float64(bytes-before-uint64(keys))/float64(n) - 8*4 }
	t.Logf("%.1f bytes an open unit, %.1f a complete one beside key and tallies; %.1f told", each(open), each(complete), float64(told)/float64(n))
	if each(open) > 120 || each(complete) > 120 {
		t.Errorf("more than 120 bytes a unit")
	}
	runtime.KeepAlive(b)
}
