package checkpoint

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"stillwell/online/wire"
)

// rows is a page as unit rows make it: keys, times, counts, amounts of money.
func rows(size int, rng *rand.Rand) []byte {
	w := wire.Writer{B: make([]byte, 0, size+64)}
	for at := uint64(1_772_000_000e9); len(w.B) < size; {
		at += uint64(rng.ExpFloat64() * 1e9)
		w.String(fmt.Sprintf("p-%07d", rng.IntN(1e7)))
		w.U64(at)
		w.F64(float64(rng.IntN(5)))
		w.F64(math.Round(rng.ExpFloat64()*8000) / 100)
		w.F64(float64(rng.IntN(2)))
		w.F64(0)
	}
	return w.B[:size]
}

// How long does a commit of 1,000 changed pages of 10,000 take, and a start from
// them? Pages of 64 KiB, of rows and of noise, in a real directory.
//
//	go test ./stream/checkpoint -run '^$' -bench . -benchtime 10x
func BenchmarkStore(b *testing.B) {
	const live, changed, size = 10_000, 1_000, 64 << 10
	for _, kind := range []string{"rows", "noise"} {
		rng := rand.New(rand.NewPCG(1, 2))
		data := make([][]byte, 64) // enough not to look alike
		for i := range data {
			if kind == "rows" {
				data[i] = rows(size, rng)
			} else {
				data[i] = noise(size, uint64(i))
			}
		}
		page := func(i int) Page {
			return Page{fmt.Sprintf("seat-map/shard/%d/rows/%d", i%64, i/64), data[rng.IntN(len(data))]}
		}
		dir := b.TempDir()
		s, err := Open(dir, Options{})
		if err != nil {
			b.Fatal(err)
		}
		defer s.Close()
		if _, err := s.Load(); err != nil {
			b.Fatal(err)
		}
		all := make([]Page, live)
		for i := range all {
			all[i] = page(i)
		}
		if err := s.Commit(nil, all, nil); err != nil {
			b.Fatal(err)
		}
		at := 0
		b.Run("commit/kind="+kind, func(b *testing.B) {
			b.SetBytes(changed * size)
			b.ReportAllocs()
			before, commits := s.Stats(), 0
			for b.Loop() {
				some := make([]Page, changed)
				for i := range some {
					some[i] = page(at % live)
					at += 7
				}
				if err := s.Commit(nil, some, nil); err != nil {
					b.Fatal(err)
				}
				commits++
			}
			st := s.Stats()
			b.ReportMetric(float64(st.Written-before.Written)/1e6/float64(commits), "MB-written/op")
			b.ReportMetric(float64(st.Moved-before.Moved)/1e6/float64(commits), "MB-moved/op")
			b.ReportMetric(float64(st.FileBytes)/float64(st.LiveBytes), "disk/live")
		})
		b.Run("small-commit/kind="+kind, func(b *testing.B) {
			for b.Loop() {
				at += 7
				if err := s.Commit(nil, []Page{page(at % live)}, nil); err != nil {
					b.Fatal(err)
				}
			}
		})
		b.Run("load/kind="+kind, func(b *testing.B) {
			b.SetBytes(live * size)
			for b.Loop() {
				ro, err := OpenReadOnly(dir, Options{})
				if err != nil {
					b.Fatal(err)
				}
				if snap, err := ro.Load(); err != nil || len(snap.Pages) != live {
					b.Fatal(err)
				}
			}
		})
	}
}
