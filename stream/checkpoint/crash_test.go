package checkpoint

import (
	"errors"
	"fmt"
	"maps"
	"math/rand/v2"
	"slices"
	"strconv"
	"syscall"
	"testing"
)

const steps = 24

// work is what step i of the workload commits; it depends on i alone, so that a
// crashed run can go on where it was restored.
func work(i int) (changed []Page, removed []string) {
	rng := rand.New(rand.NewPCG(uint64(i), 5))
	names := map[string]bool{}
	for range 1 + rng.IntN(3) {
		names[fmt.Sprintf("pier/%d/rows/%d", rng.IntN(3), rng.IntN(4))] = true
	}
	for _, name := range slices.Sorted(maps.Keys(names)) {
		data := make([]byte, rng.IntN(120))
		for j := range data {
			data[j] = byte(rng.Uint32()) // does not compress
		}
		if rng.IntN(3) == 0 {
			clear(data) // does
		}
		changed = append(changed, Page{name, data})
	}
	for range rng.IntN(2) {
		if name := fmt.Sprintf("pier/%d/rows/%d", rng.IntN(3), rng.IntN(4)); !names[name] {
			removed = append(removed, name)
		}
	}
	return changed, removed
}

// worked lists the states after 0, 1, ... steps.
func worked() []state {
	all := []state{{}}
	for i := range steps {
		all = append(all, all[i].with(work(i)))
	}
	return all
}

// run commits steps from..steps-1, and tells how many are done when one fails.
func run(s *Store, from int) (done int, err error) {
	for i := from; i < steps; i++ {
		changed, removed := work(i)
		if err := s.Commit([]byte(strconv.Itoa(i+1)), changed, removed); err != nil {
			return i, err
		}
	}
	return steps, nil
}

// resume loads what there is and tells after which step it stands.
func resume(t *testing.T, d FS, want []state) (*Store, int) {
	t.Helper()
	s := openSmall(t, d)
	snap, err := s.Load()
	if err != nil {
		t.Fatal(err)
	}
	if snap == nil {
		return s, 0
	}
	at, err := strconv.Atoi(string(snap.Meta))
	if err != nil || len(snap.Skipped) > 0 {
		t.Fatalf("meta %q, skipped %v", snap.Meta, snap.Skipped)
	}
	if !want[at].equal(snap.Pages) {
		t.Fatalf("checkpoint %d says step %d but holds other pages", snap.Sequence, at)
	}
	return s, at
}

// Power fails at the n-th operation, for every n and every mercy of the disk. What
// is found is the last checkpoint that was committed, or, if power failed after the
// rename, the one under way; and there is another one before it.
func TestCrashAtEveryOperation(t *testing.T) {
	want := worked()
	for _, mercy := range []survival{nothing, everything, anything} {
		t.Run(string(mercy), func(t *testing.T) {
			rng := rand.New(rand.NewPCG(7, 0))
			for n := 1; ; n++ {
				d := newDisk()
				s, _ := resume(t, d, want)
				d.fault = func(_ string, op int) error {
					if op == n {
						return errPower
					}
					return nil
				}
				done, err := run(s, 0)
				if err == nil && !d.dead {
					if n < 8*steps {
						t.Fatalf("only %d operations in %d commits: the test does not reach far enough", n-1, steps)
					}
					return
				}
				found := d.after(mercy, rng)
				s, at := resume(t, found, want)
				last := d.ops[len(d.ops)-1]
				if at != done && !(at == done+1 && last == "syncdir" && mercy != nothing) {
					t.Fatalf("power failed at operation %d (%s) after step %d: restored step %d", n, last, done, at)
				}
				if at >= 2 {
					older, err := look(t, found.without(found.newest()))
					if err != nil || len(older.Skipped) > 0 || !want[mustAtoi(t, older.Meta)].equal(older.Pages) {
						t.Fatalf("operation %d (%s): the checkpoint before the newest: %v, %v", n, last, older, err)
					}
				}
				if _, err := run(s, at); err != nil {
					t.Fatal(err)
				}
				if _, end := resume(t, found, want); end != steps {
					t.Fatalf("operation %d: went on to step %d", n, end)
				}
			}
		})
	}
}

func mustAtoi(t *testing.T, b []byte) int {
	t.Helper()
	n, err := strconv.Atoi(string(b))
	if err != nil {
		t.Fatal(err)
	}
	return n
}

func (d *disk) newest() uint64 {
	var k uint64
	for name := range d.now {
		if n, ok := parseName(name); ok {
			k = max(k, n)
		}
	}
	return k
}

// The n-th operation fails and those after it too, for a while, as on a full disk:
// the checkpoint before stays, and the next commit that succeeds brings everything,
// though each step is handed over once.
func TestFailureAtEveryOperation(t *testing.T) {
	want := worked()
	for _, length := range []int{1, 2, 5, 40} {
		t.Run(fmt.Sprint("operations=", length), func(t *testing.T) {
			for n, failed := 1, true; failed; n++ {
				d := newDisk()
				s, _ := resume(t, d, want)
				d.fault = func(_ string, op int) error {
					if op >= n && op < n+length {
						return fmt.Errorf("operation %d: %w", op, syscall.ENOSPC)
					}
					return nil
				}
				failed = false
				committed, named := 0, 0 // named: the step that failed after its file had its name
				for i := range steps {
					changed, removed := work(i)
					first := len(d.ops) + 1
					err := s.Commit([]byte(strconv.Itoa(i+1)), changed, removed)
					for _, p := range changed { // the caller uses its memory again
						clear(p.Data)
					}
					failed = failed || len(d.ops) >= n
					snap, lookErr := look(t, d)
					if lookErr != nil {
						t.Fatal(lookErr)
					}
					switch {
					case err == nil:
						committed = i + 1
					case !errors.Is(err, syscall.ENOSPC):
						t.Fatalf("operation %d: %v", n, err)
					case slices.Contains(d.ops[first-1:], "syncdir"):
						named = i + 1
					}
					found, pages := 0, map[string][]byte{}
					if snap != nil {
						found, pages = mustAtoi(t, snap.Meta), snap.Pages
					}
					if found != committed && found != named || found < committed || !want[found].equal(pages) {
						t.Fatalf("operation %d, step %d: found step %d, want %d or %d", n, i+1, found, committed, named)
					}
				}
				if length < 40 && committed != steps && n < len(d.ops)-20 {
					t.Fatalf("operation %d: the last step is not committed", n)
				}
				d.fault = nil
				if err := s.Commit([]byte(strconv.Itoa(steps)), nil, nil); err != nil {
					t.Fatal(err)
				}
				s, end := resume(t, d, want)
				if end != steps {
					t.Fatalf("operation %d: ended at step %d", n, end)
				}
				// What could not be removed in time is gone after the next commit.
				if err := s.Commit([]byte("24"), nil, nil); err != nil {
					t.Fatal(err)
				}
				tidy(t, d, s)
			}
		})
	}
}

// tidy fails unless the directory holds what the kept checkpoints need, and nothing else.
func tidy(t interface{ Fatalf(string, ...any) }, d *disk, s *Store) {
	need := map[string]bool{}
	files := s.shelf()
	for _, k := range append(s.current.kept(), s.current.sequence) {
		need[fileName(k)] = true
		m, err := s.manifest(files, k)
		if err != nil {
			t.Fatalf("kept checkpoint %d: %v", k, err)
		}
		for _, f := range m.files() {
			need[fileName(f)] = true
		}
	}
	got, want := slices.Sorted(maps.Keys(d.now)), slices.Sorted(maps.Keys(need))
	if !slices.Equal(got, want) {
		t.Fatalf("directory holds %v, needed are %v", got, want)
	}
}
