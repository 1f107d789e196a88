package checkpoint

import (
	"bufio"
	"errors"
	"flag"
	"fmt"
	"io"
	"maps"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"sync"
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

// A real directory: rights, leftovers of a crash, foreign files.
func TestDirectory(t *testing.T) {
	dir := t.TempDir()
	for _, name := range []string{".0000000000000007.checkpoint8123", ".0000000000000007.checkpoint", "notes.txt", "7.checkpoint", ".bashrc"} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte("x"), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	if err := os.Mkdir(filepath.Join(dir, fileName(9)), 0o700); err != nil {
		t.Fatal(err)
	}
	s, err := Open(dir, Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	if snap, err := s.Load(); snap != nil || err != nil {
		t.Fatalf("%v, %v", snap, err)
	}
	for i := range 5 {
		if err := s.Commit([]byte{byte(i)}, []Page{{"a", noise(100, uint64(i))}}, nil); err != nil {
			t.Fatal(err)
		}
	}
	found, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, e := range found {
		names = append(names, e.Name())
		if _, ok := parseName(e.Name()); ok && !e.IsDir() {
			if info, err := e.Info(); err != nil || info.Mode().Perm() != 0o600 {
				t.Errorf("%s has rights %v, %v", e.Name(), info.Mode(), err)
			}
		}
	}
	want := []string{".0000000000000007.checkpoint", ".bashrc", fileName(4), fileName(5), fileName(9), "7.checkpoint", "lock", "notes.txt"}
	if !slices.Equal(names, want) {
		t.Errorf("directory holds %v, want %v", names, want)
	}
}

// A file that is given up leaves nothing behind, even where TMPDIR would do for it.
func TestDiscard(t *testing.T) {
	dir := t.TempDir()
	t.Setenv("TMPDIR", t.TempDir())
	f, err := osFS{dir}.Create("a")
	if err != nil {
		t.Fatal(err)
	}
	if found, _ := os.ReadDir(dir); len(found) != 1 {
		t.Errorf("the temporary file is not in the directory: %v", found)
	}
	if _, err := f.Write([]byte("half")); err != nil {
		t.Fatal(err)
	}
	if err := f.Discard(); err != nil {
		t.Fatal(err)
	}
	if found, _ := os.ReadDir(dir); len(found) > 0 {
		t.Errorf("left behind: %v", found)
	}
}

// A daemon that goes on between listing and opening takes files away: not damage.
func TestLookWhileFilesGo(t *testing.T) {
	for _, hurry := range []int{1, 30} { // commits meanwhile
		d := newDisk()
		s := openSmall(t, d)
		s.small = 0
		if _, err := s.Load(); err != nil {
			t.Fatal(err)
		}
		commit := func() {
			if err := s.Commit([]byte("m"), []Page{{"a", noise(200, 1)}, {"b", noise(200, 2)}}, nil); err != nil {
				t.Fatal(err)
			}
		}
		for range 10 {
			commit()
		}
		opened := 0
		ro, err := OpenReadOnly("state", Options{FS: watched{d, func() {
			if opened++; opened == 1 {
				for range hurry {
					commit()
				}
			}
		}}})
		if err != nil {
			t.Fatal(err)
		}
		snap, err := ro.Load()
		if err != nil || len(snap.Skipped) > 0 {
			t.Fatalf("%d commits meanwhile: %+v, %v", hurry, snap, err)
		}
		if want := uint64(10 + hurry); hurry > 1 && snap.Sequence != want {
			t.Errorf("found checkpoint %d, want %d", snap.Sequence, want)
		}
	}
}

type watched struct {
	*disk
	opening func()
}

func (w watched) Open(name string) (File, int64, error) {
	w.opening()
	return w.disk.Open(name)
}

// Looking on while a daemon commits sees whole checkpoints only, and no damage.
func TestLookWhileCommitting(t *testing.T) {
	dir := t.TempDir()
	s, err := Open(dir, Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	s.small = 0
	if _, err := s.Load(); err != nil {
		t.Fatal(err)
	}
	write := func(i int) error {
		b := []byte(fmt.Sprint(i))
		return s.Commit(b, []Page{{"a", b}, {fmt.Sprint("b", i%10), noise(3000, uint64(i))}}, nil)
	}
	if err := write(0); err != nil {
		t.Fatal(err)
	}
	var wg sync.WaitGroup
	stop := make(chan struct{})
	wg.Go(func() {
		for i := 1; ; i++ {
			select {
			case <-stop:
				return
			default:
			}
			if err := write(i); err != nil {
				t.Error(err)
				return
			}
		}
	})
	ro, err := OpenReadOnly(dir, Options{})
	if err != nil {
		t.Fatal(err)
	}
	last := uint64(0)
	for range 100 {
		snap, err := ro.Load()
		if err != nil || len(snap.Skipped) > 0 || string(snap.Meta) != string(snap.Pages["a"]) || snap.Sequence < last {
			t.Errorf("%+v, %v", snap, err)
			break
		}
		last = max(last, snap.Sequence, s.Stats().Sequence/2)
	}
	close(stop)
	wg.Wait()
}

func TestLock(t *testing.T) {
	dir := t.TempDir()
	child := exec.Command(os.Args[0], "-test.run=^TestHoldLock$")
	child.Env = append(os.Environ(), "CHECKPOINT_LOCK="+dir)
	out, err := child.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := child.Start(); err != nil {
		t.Fatal(err)
	}
	defer child.Wait()
	defer child.Process.Kill()
	if line, err := bufio.NewReader(out).ReadString('\n'); line != "held\n" {
		t.Fatalf("child says %q, %v", line, err)
	}
	_, err = Open(dir, Options{})
	if !errors.Is(err, ErrLocked) || !strings.Contains(err.Error(), fmt.Sprintf("process %d", child.Process.Pid)) {
		t.Fatalf("error %v, want one that names process %d", err, child.Process.Pid)
	}
	if _, err := OpenReadOnly(dir, Options{}); err != nil {
		t.Errorf("looking takes no lock: %v", err)
	}
	// Killed: the system gives the lock back, though the file still names the dead.
	child.Process.Kill()
	child.Wait()
	s, err := Open(dir, Options{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := Open(dir, Options{}); !errors.Is(err, ErrLocked) || !strings.Contains(err.Error(), fmt.Sprintf("process %d", os.Getpid())) {
		t.Errorf("error %v, want one that names this process", err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if s, err = Open(dir, Options{}); err != nil {
		t.Fatal(err)
	}
	s.Close()
}

// TestHoldLock is the other process of TestLock.
func TestHoldLock(t *testing.T) {
	dir := os.Getenv("CHECKPOINT_LOCK")
	if dir == "" {
		t.Skip("runs as a process of its own, from TestLock")
	}
	if _, err := Open(dir, Options{}); err != nil {
		t.Fatal(err)
	}
	fmt.Println("held")
	io.Copy(io.Discard, os.Stdin) // ends at once, as there is no input
	select {}
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
