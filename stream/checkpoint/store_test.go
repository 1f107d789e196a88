package checkpoint

import (
	"errors"
	"flag"
	"fmt"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// The same cases every time, unless a seed is asked for.
func TestMain(m *testing.M) {
	flag.Parse()
	if f := flag.Lookup("rapid.seed"); f.Value.String() == "0" {
		f.Value.Set("7")
	}
	os.Exit(m.Run())
}

// Against a plain map: random commits, reopening, all sizes of page. After each
// commit the newest two are right, the fallback shares no file with the newest, and
// the directory holds no file in vain.
func TestAgainstMap(t *testing.T) {
	phases, whole := 0, 0
	rapid.Check(t, func(t *rapid.T) {
		d := newDisk()
		s := openSmall(t, d)
		s.small = int64(rapid.SampledFrom([]int{0, 300, 1 << 20}).Draw(t, "small"))
		s.keep = rapid.IntRange(2, 4).Draw(t, "keep")
		load := func(s *Store) *Snapshot {
			snap, err := s.Load()
			if err != nil {
				t.Fatal(err)
			}
			return snap
		}
		if load(s) != nil {
			t.Fatal("an empty directory has a checkpoint")
		}
		now, all := state{}, map[uint64]state{}
		name := rapid.StringMatching(`(a/|b/)?[a-c]{1,3}`)
		for range rapid.IntRange(1, 60).Draw(t, "commits") {
			if rapid.IntRange(0, 9).Draw(t, "reopen") == 0 {
				small, keep := s.small, s.keep
				if err := s.Close(); err != nil {
					t.Fatal(err)
				}
				s = openSmall(t, d)
				s.small, s.keep = small, keep
				if snap := load(s); snap != nil && !now.equal(snap.Pages) {
					t.Fatalf("reopened at %d with other pages", snap.Sequence)
				}
			}
			var changed []Page
			var removed []string
			for n, what := range rapid.MapOfN(name, rapid.IntRange(-1, 3), 0, 5).Draw(t, "pages") {
				if what < 0 {
					removed = append(removed, n)
					continue
				}
				size := rapid.IntRange(0, []int{1, 50, 200, 400}[what]).Draw(t, "size")
				changed = append(changed, Page{n, noise(size, rapid.Uint64().Draw(t, "seed"))})
			}
			if err := s.Commit([]byte("m"), changed, removed); err != nil {
				t.Fatal(err)
			}
			now = now.with(changed, removed)
			all[s.current.sequence] = now

			for _, c := range []struct {
				d *disk
				k uint64
			}{{d, s.current.sequence}, {d.without(s.current.sequence), s.current.sequence - 1}} {
				ro, err := OpenReadOnly("state", Options{FS: c.d})
				if err != nil {
					t.Fatal(err)
				}
				snap := load(ro)
				if c.k == 0 && snap == nil {
					continue
				}
				if snap.Sequence != c.k || len(snap.Skipped) > 0 || !all[c.k].equal(snap.Pages) {
					t.Fatalf("restored %d, want %d; skipped %v", snap.Sequence, c.k, snap.Skipped)
				}
			}
			tidy(t, d, s)
			if f := s.current.fallback; f > 0 {
				if files := s.current.files(); len(files) > 0 && files[0] <= f {
					t.Fatalf("checkpoint %d lives in %v, which its fallback %d may share", s.current.sequence, files, f)
				}
			}
			if s.current.candidate > 0 && s.current.candidate < s.current.sequence-1 {
				phases++ // a rewriting that takes several commits
			}
			if s.current.fallback == s.current.sequence-1 {
				whole++ // a checkpoint that stands alone
			}
			size := int64(0)
			for _, n := range d.now {
				size += int64(len(n.data))
			}
			if st := s.Stats(); st.Pages != len(now) || st.Files != len(d.now) || st.FileBytes != size || st.Sequence != s.current.sequence {
				t.Fatalf("stats %+v, %d pages in %d files of %d bytes", st, len(now), len(d.now), size)
			}
		}
	})
	t.Logf("%d commits within a rewriting, %d stand alone", phases, whole)
	if phases < 20 || whole < 20 {
		t.Errorf("%d commits within a rewriting, %d stand alone: the test does not reach them", phases, whole)
	}
}

// While a state lives on with few changes a commit, the directory stays within five
// times the live bytes, and writing within four times what changes and manifests take.
func TestSpaceAndWorkAreBounded(t *testing.T) {
	for _, tt := range []struct{ pages, size, changed int }{
		{200, 5000, 2}, // pages outweigh the manifest
		{500, 1000, 1}, // and the other way round
	} {
		t.Run(fmt.Sprintf("pages=%d", tt.pages), func(t *testing.T) {
			const commits = 400
			d := newDisk()
			s := openSmall(t, d)
			s.small, s.buffer = 0, 1<<16
			if _, err := s.Load(); err != nil {
				t.Fatal(err)
			}
			all := make([]Page, tt.pages)
			for i := range all {
				all[i] = Page{fmt.Sprint("pier/", i), noise(tt.size, uint64(i))}
			}
			if err := s.Commit(nil, all, nil); err != nil {
				t.Fatal(err)
			}
			first := s.Stats()
			var worst, largest int64
			for i := range commits {
				before := s.Stats().Written
				some := []Page{all[20+i*7%(tt.pages-20)], all[i%20]}[:tt.changed]
				if err := s.Commit(nil, some, nil); err != nil {
					t.Fatal(err)
				}
				if i == 17 && s.current.fallback == 0 {
					t.Error("no fallback 17 commits after the first")
				}
				st := s.Stats()
				worst, largest = max(worst, st.FileBytes), max(largest, st.Written-before)
			}
			st := s.Stats()
			changes := (st.Written - first.Written - st.Moved) / commits // and manifest
			work := (st.Written - first.Written) / commits
			t.Logf("live %d; directory at most %d; a commit writes %d on average and at most %d, without what is moved %d",
				st.LiveBytes, worst, work, largest, changes)
			if worst > 5*st.LiveBytes {
				t.Errorf("directory grew to %d bytes, %d are live", worst, st.LiveBytes)
			}
			if work > 4*changes {
				t.Errorf("%d bytes a commit, where changes and manifest take %d", work, changes)
			}
			if limit := st.LiveBytes/16 + int64(tt.size) + 2*changes; largest > limit {
				t.Errorf("one commit wrote %d bytes, the limit is %d", largest, limit)
			}
		})
	}
}

func TestMisuse(t *testing.T) {
	must := func(err error) {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
	}
	dir := filepath.Join(t.TempDir(), "a", "state")
	if _, err := OpenReadOnly(dir, Options{}); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("looking at no directory: %v", err)
	}
	if _, err := Open(dir, Options{Keep: 1}); err == nil {
		t.Error("keeping one checkpoint is accepted")
	}
	s, err := Open(dir, Options{})
	must(err)
	defer s.Close()
	if err := s.Commit(nil, nil, nil); err == nil {
		t.Error("a commit before Load is accepted")
	}
	if snap, err := s.Load(); snap != nil || err != nil {
		t.Errorf("empty directory: %v, %v", snap, err)
	}
	for _, tt := range []struct {
		changed []Page
		removed []string
		want    string
	}{
		{[]Page{{"a", nil}, {"a", nil}}, nil, "twice"},
		{[]Page{{"a", nil}}, []string{"a"}, "changed and removed"},
		{[]Page{{"", nil}}, nil, "0 bytes"},
		{[]Page{{strings.Repeat("n", MaxName+1), nil}}, nil, "1025 bytes"},
		{[]Page{{"a", make([]byte, MaxPage+1)}}, nil, "split it"},
	} {
		if err := s.Commit(nil, tt.changed, tt.removed); err == nil || !strings.Contains(err.Error(), tt.want) {
			t.Errorf("error %v, want %q", err, tt.want)
		}
	}
	must(s.Commit([]byte("m"), []Page{{strings.Repeat("n", MaxName), nil}}, []string{"never there", "never there"}))
	if _, err := s.Load(); err == nil {
		t.Error("a second Load is accepted")
	}
	ro, err := OpenReadOnly(dir, Options{})
	must(err)
	for range 2 {
		if snap, err := ro.Load(); err != nil || len(snap.Pages) != 1 || string(snap.Meta) != "m" {
			t.Errorf("looking: %v, %v", snap, err)
		}
	}
	if err := ro.Commit(nil, nil, nil); err == nil {
		t.Error("a commit to a store that only looks is accepted")
	}
	must(ro.Close())
	must(s.Close())
	must(s.Close())
	if err := s.Commit(nil, nil, nil); err == nil {
		t.Error("a commit after Close is accepted")
	}
	if _, err := s.Load(); err == nil {
		t.Error("a Load after Close is accepted")
	}
}

// Equal commits give equal bytes.
func TestSameBytes(t *testing.T) {
	var disks [2]*disk
	for i := range disks {
		d := newDisk()
		s := openSmall(t, d)
		if _, err := s.Load(); err != nil {
			t.Fatal(err)
		}
		if _, err := run(s, 0); err != nil {
			t.Fatal(err)
		}
		disks[i] = d
	}
	if !maps.EqualFunc(disks[0].now, disks[1].now, func(a, b *inode) bool { return slices.Equal(a.data, b.data) }) {
		t.Error("two runs over the same pages left different files")
	}
}
