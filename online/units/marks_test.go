package units

import (
	"maps"
	"slices"
	"testing"

	"pgregory.net/rapid"

	"stillwell/online/wire"
)

// TestMarksAgainstMap drives marks and a plain map with the same operations, storing and
// restoring them now and then. Times rise as they do for units that become complete.
func TestMarksAgainstMap(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var m Marks
		want := map[uint64]int64{}
		stored := map[int][]byte{}
		now := int64(0)
		for range rapid.IntRange(1, 40).Draw(t, "operations") {
			switch rapid.IntRange(0, 3).Draw(t, "what") {
			case 0, 1:
				for range rapid.IntRange(1, 2*pageRows).Draw(t, "marks") {
					hash := uint64(len(want)) * 0x9e3779b97f4a7c15 &^ 63
					if rapid.IntRange(0, 20).Draw(t, "again") == 0 && len(want) > 0 {
						hash = slices.Min(slices.Collect(maps.Keys(want)))
					}
					now++
					until := now + 3000
					want[hash] = until
					m.Put(hash, uint8(until), until)
				}
			case 2:
				m.Expire(now)
			case 3:
				for _, c := range m.Snapshot(false) {
					w := &wire.Writer{}
					c.Append(w)
					stored[c.Page] = w.B
				}
				m = Marks{}
				for _, at := range slices.Sorted(maps.Keys(stored)) {
					if err := m.Restore(at, stored[at]); err != nil {
						t.Fatal(err)
					}
				}
			}
		}
		for hash, until := range want {
			note, got, ok := m.Find(hash)
			if ok && note != uint8(got) {
				t.Fatalf("note %d, want %d", note, uint8(got))
			}
			if until > now && (!ok || got != until) {
				t.Fatalf("mark until %d: got %d, %v", until, got, ok)
			}
			if ok && got != until {
				t.Fatalf("mark until %d, want %d", got, until)
			}
		}
	})
}

// TestMarksGo: marks that are void give their room back, and what is stored of them.
func TestMarksGo(t *testing.T) {
	var m Marks
	stored := map[int]int{}
	for i := range uint64(200_000) {
		hash := i * 0x9e3779b97f4a7c15 &^ 63
		m.Put(hash, 1, int64(i)+10_000)
		m.Expire(int64(i))
		if i%5000 == 0 {
			for _, c := range m.Snapshot(false) {
				stored[c.Page] = len(c.marks)
			}
		}
	}
	if m.Len() > 10_000+2*pageRows {
		t.Errorf("%d marks kept, of which 10,000 are not void", m.Len())
	}
	n := 0
	for _, marks := range stored {
		n += marks
	}
	if n > 15_000+2*pageRows {
		t.Errorf("%d marks stored", n)
	}
	if per := float64(m.Bytes()) / float64(m.Len()); per > 16+8*4 {
		t.Errorf("%.1f bytes a mark", per)
	}
}

func TestMarksRefuseDamage(t *testing.T) {
	var m Marks
	m.Put(5, 1, 7)
	w := &wire.Writer{}
	m.Snapshot(true)[0].Append(w)
	for n := range w.B {
		if err := new(Marks).Restore(0, w.B[:n]); err == nil {
			t.Errorf("the first %d of %d bytes were accepted", n, len(w.B))
		}
	}
	if err := new(Marks).Restore(-1, w.B); err == nil {
		t.Error("page -1 was accepted")
	}
}
