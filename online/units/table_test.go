package units

import (
	"bytes"
	"fmt"
	"hash/maphash"
	"maps"
	"slices"
	"testing"

	"pgregory.net/rapid"

	"stillwell/online/wire"
)

var seed = maphash.MakeSeed()

// few hashes make many collisions.
func hashOf(key []byte) uint64 { return maphash.Bytes(seed, key) % 7 * 0x100000001 }

// TestAgainstMap drives a table and a plain map with the same operations, storing and
// restoring the table now and then.
func TestAgainstMap(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		tab := New(2, true, 1)
		type unit struct {
			v    float64
			held []int64
		}
		want := map[string]unit{}
		stored := map[int][]byte{}
		clock := int64(0)
		for range rapid.IntRange(1, 300).Draw(t, "operations") {
			key := []byte(fmt.Sprintf("p-%d", rapid.IntRange(0, 60).Draw(t, "key")))
			h := hashOf(key)
			r := tab.Find(h, key)
			u, ok := want[string(key)]
			if (r != None) != ok {
				t.Fatalf("find %s: row %v, in the map: %v", key, r, ok)
			}
			switch rapid.IntRange(0, 5).Draw(t, "what") {
			case 0, 1:
				if !ok {
					r = tab.Insert(h, key, Waiting)
				}
				u.v = rapid.Float64().Draw(t, "value")
				tab.Change(r)[0] = u.v
				want[string(key)] = u
			case 2:
				if ok {
					clock++
					tab.Hold(r, clock, []float64{float64(clock)}, nil)
					u.held = append(u.held, clock)
					want[string(key)] = u
				}
			case 3:
				if ok {
					tab.Take(r, func(int64, []float64, int) bool { return true })
					tab.Remove(r)
					delete(want, string(key))
				}
			case 4:
				if ok && len(u.held) > 0 {
					cut := u.held[len(u.held)/2]
					tab.Take(r, func(at int64, _ []float64, _ int) bool { return at < cut })
					u.held = slices.DeleteFunc(u.held, func(at int64) bool { return at < cut })
					want[string(key)] = u
				}
			case 5:
				for _, c := range tab.Snapshot(false) {
					w := &wire.Writer{}
					c.Append(w)
					stored[c.Page] = w.B
				}
				tab = New(2, true, 1)
				for _, at := range slices.Sorted(maps.Keys(stored)) {
					if err := tab.Restore(at, stored[at]); err != nil {
						t.Fatal(err)
					}
				}
				tab.Finish()
			}
		}
		if tab.Len() != len(want) {
			t.Fatalf("%d rows, want %d", tab.Len(), len(want))
		}
		held := 0
		for key, u := range want {
			r := tab.Find(hashOf([]byte(key)), []byte(key))
			if r == None || !bytes.Equal(tab.Key(r), []byte(key)) || u.v == u.v && u.v != 0 && tab.Values(r)[0] != u.v {
				t.Fatalf("%s: row %v", key, r)
			}
			var got []int64
			for _, c := range tab.Snapshot(true) {
				for _, h := range c.held {
					if Row(c.Page<<pageBits+h.row) == r {
						for _, e := range h.events {
							got = append(got, e.time)
						}
					}
				}
			}
			if !slices.Equal(got, u.held) {
				t.Fatalf("%s holds %v, want %v", key, got, u.held)
			}
			held += len(u.held)
		}
		if tab.Held.Len() != held {
			t.Fatalf("%d held, want %d", tab.Held.Len(), held)
		}
	})
}

func TestRestoreRefusesDamage(t *testing.T) {
	tab := New(2, true, 1)
	r := tab.Insert(5, []byte("p-1"), Open)
	tab.Hold(r, 7, []float64{1}, nil)
	w := &wire.Writer{}
	tab.Snapshot(true)[0].Append(w)
	for n := range w.B {
		if err := New(2, true, 1).Restore(0, w.B[:n]); err == nil {
			t.Errorf("the first %d of %d bytes were accepted", n, len(w.B))
		}
	}
	if err := New(3, true, 1).Restore(0, w.B); err == nil {
		t.Error("a page of another width was accepted")
	}
}

// TestKeysAreCompacted: names of units that are gone give their room back.
func TestKeysAreCompacted(t *testing.T) {
	tab := New(1, false, 0)
	for i := range 200_000 {
		key := fmt.Appendf(nil, "passenger-%d", i)
		r := tab.Insert(uint64(i)*0x9e3779b97f4a7c15, key, Open)
		if i%100 != 0 {
			tab.Remove(r)
		}
	}
	size := 0
	for _, b := range tab.keys.blocks {
		size += cap(b)
	}
	if size > 400_000 {
		t.Errorf("%d bytes of names kept for %d units", size, tab.Len())
	}
}

// Units of one shard have the low bits of their hashes in common.
func BenchmarkFind(b *testing.B) {
	tab := New(4, false, 0)
	const n = 1 << 17
	var keys [n][]byte
	for i := range keys {
		keys[i] = fmt.Appendf(nil, "p-%06d", i)
		tab.Insert(uint64(i)*0x9e3779b97f4a7c15&^63, keys[i], Open)
	}
	b.ReportAllocs()
	for i := 0; b.Loop(); i++ {
		k := (i * 7919) % n
		if tab.Find(uint64(k)*0x9e3779b97f4a7c15&^63, keys[k]) == None {
			b.Fatal("lost")
		}
	}
}
