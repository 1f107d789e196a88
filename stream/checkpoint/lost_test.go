package checkpoint

import (
	"errors"
	"fmt"
	"slices"
	"testing"
)

// Damage that shows while the store is open is mended by the caller, who still has
// the pages; until then no commit pretends to be whole.
func TestLostPagesAreWrittenAgain(t *testing.T) {
	d := newDisk()
	s := openSmall(t, d)
	s.small = 0
	if _, err := s.Load(); err != nil {
		t.Fatal(err)
	}
	want := state{}
	commits := 0
	commit := func(changed ...Page) error {
		if commits++; commits > 100 {
			t.Fatal("no end of the rewritings")
		}
		want = want.with(changed, nil)
		return s.Commit(nil, changed, nil)
	}
	must := func(err error) {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
	}
	a, b, c := Page{"a", noise(400, 1)}, Page{"b", noise(400, 2)}, Page{"c", noise(400, 3)}
	must(commit(a, b, c))
	for s.current.fallback == 0 || s.current.candidate != 0 {
		must(commit(Page{"x", noise(40, 9)}))
	}
	good := s.current.fallback
	p, q := s.current.pages["a"], s.current.pages["c"]
	d.now[fileName(p.file)].data[p.offset] ^= 1
	d.now[fileName(q.file)].data[q.offset] ^= 1

	var lost *LostError
	var err error
	for i := 0; err == nil && i < 40; i++ {
		err = commit(Page{"x", noise(60, uint64(i))})
	}
	if !errors.As(err, &lost) || !slices.Equal(lost.Pages, []string{"a", "c"}) || !errors.Is(err, ErrDamaged) {
		t.Fatalf("error %v, want pages a and c lost", err)
	}
	if err := commit(Page{"y", noise(10, 1)}, a); !errors.As(err, &lost) || !slices.Equal(lost.Pages, []string{"c"}) {
		t.Fatalf("error %v, want page c lost", err)
	}
	must(commit(c))
	mustBe(t, d, s.current.sequence, want)
	if s.current.fallback != good {
		t.Errorf("fallback is %d, want the intact %d", s.current.fallback, good)
	}
	if kept := s.current.kept(); !slices.Equal(kept, []uint64{good}) {
		t.Errorf("damaged checkpoints are still counted on: kept are %v", kept)
	}
	for i := range 20 {
		must(commit(Page{"x", noise(60, uint64(i))}))
	}
	mustBe(t, d, s.current.sequence, want)
	tidy(t, d, s)
	if s.current.fallback <= good {
		t.Error("no new fallback after the damage was mended")
	}
	mustBe(t, d.without(s.current.sequence), s.current.sequence-1, want.with([]Page{{"x", noise(60, 18)}}, nil))
}

// A fallback that is gone when the store opens is made anew without delay, however
// little was written since the last rewriting.
func TestLostFallbackIsRenewed(t *testing.T) {
	d := newDisk()
	s := openSmall(t, d)
	s.small = 0
	if _, err := s.Load(); err != nil {
		t.Fatal(err)
	}
	commit := func(s *Store, size int) {
		t.Helper()
		if err := s.Commit(nil, []Page{{fmt.Sprint("p", size), noise(size, 1)}}, nil); err != nil {
			t.Fatal(err)
		}
	}
	commit(s, 9000)
	for i := 0; i < 50 && (s.current.fallback == 0 || s.current.candidate != 0); i++ {
		commit(s, 10)
	}
	delete(d.now, fileName(s.current.fallback))
	s = openSmall(t, d)
	s.small = 0
	if _, err := s.Load(); err != nil {
		t.Fatal(err)
	}
	if s.current.candidate != 0 || s.current.written > 4000 {
		t.Fatalf("a rewriting is due anyway: %+v", s.current)
	}
	commit(s, 10)
	if s.current.candidate == 0 && s.current.fallback == 0 {
		t.Error("no fallback, and none under way")
	}
}
