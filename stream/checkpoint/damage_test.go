package checkpoint

import (
	"bytes"
	"errors"
	"fmt"
	"maps"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"go.uber.org/zap"
	"go.uber.org/zap/zaptest/observer"
)

// noise is n bytes that do not compress.
func noise(n int, seed uint64) []byte {
	rng := rand.New(rand.NewPCG(seed, 1))
	b := make([]byte, n)
	for i := range b {
		b[i] = byte(rng.Uint32())
	}
	return b
}

// history makes a directory in which every kind of region occurs, and tells what
// each checkpoint holds. Two rewritings are over and a third is under way: the
// fallback shares nothing with what came later, and the newest two still live
// partly in the files of the candidate.
func history(t *testing.T) (*disk, map[uint64]state) {
	t.Helper()
	d := newDisk()
	s := openSmall(t, d)
	s.small = 0
	if _, err := s.Load(); err != nil {
		t.Fatal(err)
	}
	held := map[uint64]state{0: {}}
	commit := func(names ...string) {
		t.Helper()
		k := uint64(len(held))
		if k > 100 {
			t.Fatal("no end of the rewritings")
		}
		var changed []Page
		for _, name := range names {
			changed = append(changed, Page{name, noise(map[string]int{"d": 1000, "e": 1500}[name]+150, k*100+uint64(name[0]))})
		}
		if err := s.Commit([]byte("positions"), changed, nil); err != nil {
			t.Fatal(err)
		}
		held[k] = held[k-1].with(changed, nil)
	}
	commit("a", "b", "c", "d", "e")
	for s.current.fallback == 0 {
		commit("a")
	}
	for first := s.current.fallback; s.current.fallback == first; {
		commit("b")
	}
	for s.current.candidate == 0 {
		commit("c")
	}
	commit("c")
	return d, held
}

// intact is the newest checkpoint of whole that is unharmed in d: 0 if there is none.
func intact(t *testing.T, whole, d *disk) uint64 {
	t.Helper()
	same := func(k uint64, from, to int64) bool {
		a, b := whole.now[fileName(k)], d.now[fileName(k)]
		return a != nil && b != nil && len(a.data) == len(b.data) && bytes.Equal(a.data[from:to], b.data[from:to])
	}
	files := (&Store{fs: whole}).shelf()
	for k := whole.newest(); k > 0; k-- {
		src, err := files.get(k)
		if err != nil {
			continue
		}
		m, err := src.manifest(k)
		if err != nil {
			t.Fatal(err)
		}
		ok := same(k, 0, headSize) && same(k, headSize+m.own(), src.size)
		for _, p := range m.pages {
			ok = ok && same(p.file, p.offset, p.offset+int64(p.stored))
		}
		if ok {
			return k
		}
	}
	return 0
}

func TestDamage(t *testing.T) {
	whole, held := history(t)
	newest := whole.newest()
	s := openSmall(t, whole.copy())
	if _, err := s.Load(); err != nil {
		t.Fatal(err)
	}
	m := s.current
	before, fallback, candidate := newest-1, m.fallback, m.candidate
	old, err := s.manifest(s.shelf(), fallback)
	if err != nil {
		t.Fatal(err)
	}
	t.Logf("newest %d lives in %v, fallback %d in %v, candidate %d, files on disk %d",
		newest, m.files(), fallback, old.files(), candidate, len(s.disk))
	if candidate == 0 || fallback == 0 || candidate >= before || len(m.files()) < 3 {
		t.Fatal("the history lacks the regions that the table damages")
	}
	shared := slices.IndexFunc(m.files(), func(k uint64) bool { return k > fallback && k <= candidate })
	base := m.files()[shared] // of the newest, the one before and the candidate

	flip := func(d *disk, k uint64, at int) {
		b := d.now[fileName(k)].data
		b[(at+len(b))%len(b)] ^= 0x10
	}
	// ownPage is where the first page of a file that checkpoint m still needs lies.
	ownPage := func(m *manifest, k uint64) int {
		for _, p := range inOrder(m.pages, m.sequence) {
			if p.file == k {
				return int(p.offset)
			}
		}
		t.Fatalf("checkpoint %d needs nothing of file %d", m.sequence, k)
		return 0
	}
	for _, tt := range []struct {
		name  string
		harm  func(d *disk)
		want  uint64 // 0: none
		skips int
	}{
		{"nothing", func(*disk) {}, newest, 0},
		{"newest: head", func(d *disk) { flip(d, newest, 0) }, before, 1},
		{"newest: version", func(d *disk) { flip(d, newest, 8) }, before, 1},
		{"newest: page", func(d *disk) { flip(d, newest, headSize) }, before, 1},
		{"newest: manifest", func(d *disk) { flip(d, newest, -tailSize-1) }, before, 1},
		{"newest: tail", func(d *disk) { flip(d, newest, -1) }, before, 1},
		{"newest: empty", func(d *disk) { d.now[fileName(newest)].data = nil }, before, 1},
		{"newest: cut", func(d *disk) { n := d.now[fileName(newest)]; n.data = n.data[:len(n.data)-1] }, before, 1},
		{"newest: longer", func(d *disk) { n := d.now[fileName(newest)]; n.data = append(n.data, 0) }, before, 1},
		{"newest: missing", func(d *disk) { delete(d.now, fileName(newest)) }, before, 0},
		{"newest: another one's contents", func(d *disk) { d.now[fileName(newest)] = d.now[fileName(before)] }, before, 1},
		{"newest two", func(d *disk) { flip(d, newest, 0); flip(d, before, 0) }, candidate, 2},
		// The checkpoint after the fallback is given up, but all its files happen to serve others.
		{"shared page", func(d *disk) { flip(d, base, ownPage(m, base)) }, fallback + 1, 3},
		{"shared file missing", func(d *disk) { delete(d.now, fileName(base)) }, fallback + 1, 3},
		{"shared page, no such luck", func(d *disk) {
			flip(d, base, ownPage(m, base))
			flip(d, fallback+1, -1)
		}, fallback, 3},
		{"shared file's head, which only its own checkpoint needs", func(d *disk) { flip(d, candidate, 0) }, newest, 0},
		{"all since the fallback", func(d *disk) {
			for k := fallback + 1; k <= newest; k++ {
				delete(d.now, fileName(k))
			}
		}, fallback, 0},
		{"fallback's manifest", func(d *disk) { flip(d, fallback, -1) }, newest, 0},
		{"fallback missing", func(d *disk) { delete(d.now, fileName(fallback)) }, newest, 0},
		{"a file of the fallback missing", func(d *disk) { delete(d.now, fileName(old.files()[0])) }, newest, 0},
		{"the one before: manifest", func(d *disk) { flip(d, before, -1) }, newest, 0},
		{"candidate's manifest", func(d *disk) { flip(d, candidate, -1) }, newest, 0},
		{"fallback's page", func(d *disk) { flip(d, old.files()[0], ownPage(old, old.files()[0])) }, newest, 0},
		{"shared page and fallback's page", func(d *disk) {
			flip(d, base, ownPage(m, base))
			flip(d, fallback+1, -1)
			flip(d, old.files()[0], ownPage(old, old.files()[0]))
		}, 0, 0},
		{"everything cut in half", func(d *disk) {
			for _, n := range d.now {
				n.data = n.data[:len(n.data)/2]
			}
		}, 0, 0},
	} {
		t.Run(tt.name, func(t *testing.T) {
			d := whole.copy()
			tt.harm(d)
			core, logs := observer.New(zap.ErrorLevel)
			s, err := Open("state", Options{FS: d, Log: zap.New(core)})
			if err != nil {
				t.Fatal(err)
			}
			s.small = 0
			snap, err := s.Load()
			if tt.want == 0 {
				if !errors.Is(err, ErrDamaged) || !strings.Contains(err.Error(), "move it away") {
					t.Fatalf("error %v, want damage and what to do", err)
				}
				if err := s.Commit(nil, []Page{{"a", nil}}, nil); err == nil {
					t.Fatal("a commit over damaged checkpoints is accepted")
				}
				return
			}
			if err != nil {
				t.Fatal(err)
			}
			if k := intact(t, whole, d); k != tt.want && !strings.Contains(tt.name, "another") {
				t.Fatalf("the row is wrong: %d is the newest that is intact", k)
			}
			if snap.Sequence != tt.want || !held[tt.want].equal(snap.Pages) {
				t.Fatalf("restored %d, right: %t; want %d; skipped: %v", snap.Sequence, held[tt.want].equal(snap.Pages), tt.want, snap.Skipped)
			}
			if len(snap.Skipped) != tt.skips {
				t.Errorf("%d skipped, want %d: %v", len(snap.Skipped), tt.skips, snap.Skipped)
			}
			if held := s.held[fallback] != nil; tt.want == newest && held == strings.Contains(tt.name, "fallback") && tt.name != "fallback's page" {
				t.Errorf("fallback %d is held: %t", fallback, held)
			}
			if logs.Len() != len(snap.Skipped) {
				t.Errorf("%d errors logged for %d skipped", logs.Len(), len(snap.Skipped))
			}
			// The store goes on from there, and soon has two independent ones again.
			next, found := Page{"z", noise(50, 3)}, d.newest()
			for i := range 20 {
				if err := s.Commit([]byte{byte(i)}, []Page{next}, nil); err != nil {
					t.Fatal(err)
				}
				tidy(t, d, s)
				if s.current.fallback == 0 && s.current.candidate == 0 {
					t.Error("no fallback, and none under way")
				}
			}
			if s.current.sequence != found+20 {
				t.Errorf("20 commits after %d, the largest number found, it is %d", found, s.current.sequence)
			}
			mustBe(t, d, s.current.sequence, held[tt.want].with([]Page{next}, nil))
			if s.current.sequence <= d.newest()-1 {
				t.Errorf("went on with %d, though there was a checkpoint %d", s.current.sequence, newest)
			}
			if s.current.fallback == 0 {
				t.Error("no fallback after 20 commits")
			}
		})
	}
}

// One file holds all: no bit of it may change unnoticed, and no shorter file passes.
func TestEveryBitAndEveryTruncation(t *testing.T) {
	d := newDisk()
	s := openSmall(t, d)
	if _, err := s.Load(); err != nil {
		t.Fatal(err)
	}
	if err := s.Commit([]byte("meta"), []Page{{"a", noise(40, 1)}, {"ab", make([]byte, 200)}, {"b", nil}}, nil); err != nil {
		t.Fatal(err)
	}
	full := d.now[fileName(1)].data
	try := func(what string, b []byte) {
		t.Helper()
		c := newDisk()
		c.now[fileName(1)] = &inode{b, len(b)}
		if snap, err := look(t, c); err == nil {
			t.Fatalf("accepted %s: %v", what, snap)
		}
	}
	for i := range full {
		try(fmt.Sprintf("the first %d of %d bytes", i, len(full)), full[:i])
		for bit := range 8 {
			b := slices.Clone(full)
			b[i] ^= 1 << bit
			try(fmt.Sprintf("byte %d with bit %d changed", i, bit), b)
		}
	}
	try("a byte more", append(slices.Clone(full), 0))
	mustBe(t, d, 1, state{"a": string(noise(40, 1)), "ab": string(make([]byte, 200)), "b": ""})
}

// Whatever byte of whatever file is damaged: what is restored is one checkpoint, whole.
func TestNeverAMix(t *testing.T) {
	whole, held := history(t)
	restored := map[uint64]int{}
	for _, name := range slices.Sorted(maps.Keys(whole.now)) {
		for i := range whole.now[name].data {
			d := whole.copy()
			d.now[name].data[i] ^= 0x81
			snap, err := look(t, d)
			if err != nil {
				t.Fatalf("%s, byte %d: one damaged byte leaves nothing: %v", name, i, err)
			}
			if k := intact(t, whole, d); k != snap.Sequence || !held[k].equal(snap.Pages) {
				t.Fatalf("%s, byte %d: restored checkpoint %d, right: %t; want %d", name, i, snap.Sequence, held[snap.Sequence].equal(snap.Pages), k)
			}
			restored[snap.Sequence]++
		}
	}
	t.Logf("checkpoints restored, by damaged byte: %v", restored)
	if len(restored) < 3 {
		t.Error("too few outcomes: the test does not reach the fallback")
	}
}

// A file of a newer format is no damage: an older checkpoint must not replace it.
func TestNewerVersionIsNotSkipped(t *testing.T) {
	d, _ := history(t)
	b := d.now[fileName(d.newest())].data
	b[8] = version + 1
	sum := checksum(b[:12])
	b[12], b[13], b[14], b[15] = byte(sum), byte(sum>>8), byte(sum>>16), byte(sum>>24)
	if _, err := look(t, d); !errors.Is(err, ErrVersion) {
		t.Fatalf("error %v, want %v", err, ErrVersion)
	}
}

// Nor is a file that must not be read.
func TestTroubleIsNotDamage(t *testing.T) {
	d, _ := history(t)
	if _, err := look(t, denied{d, fileName(d.newest())}); !errors.Is(err, errDenied) {
		t.Fatalf("error %v, want %v", err, errDenied)
	}
}

var errDenied = errors.New("permission denied")

type denied struct {
	*disk
	name string
}

func (d denied) Open(name string) (File, int64, error) {
	if name == d.name {
		return nil, 0, errDenied
	}
	return d.disk.Open(name)
}
