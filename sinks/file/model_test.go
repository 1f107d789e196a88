package file

import (
	"fmt"
	"maps"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// run is a sink under test beside what it should have written.
type run struct {
	*rapid.T
	dir   string
	cfg   Config
	steps []Lines

	sink    *Sink
	next    int       // step to emit
	durable []durable // the last two checkpoints, the older first
	taken   *durable  // a checkpoint that is not durable yet
	synced  map[*log]Spot
	others  bool // there were files of others
	messy   bool // what lay behind a place may not have been known as ours
}

type durable struct {
	place *Place
	next  int
}

// TestModel: whatever crashes, rotates and lies in the way, the files hold exactly the lines of
// an undisturbed run, and what was there before is put away.
func TestModel(t *testing.T) {
	root := memory(t)
	rapid.Check(t, func(t *rapid.T) {
		dir, err := os.MkdirTemp(root, "run")
		if err != nil {
			t.Fatal(err)
		}
		r := &run{T: t, dir: dir, steps: drawSteps(t)}
		r.cfg = Config{Readings: filepath.Join(dir, "readings.jsonl"),
			MaxBytes: rapid.SampledFrom([]int64{0, 1, 300, 1500}).Draw(t, "max"), Keep: rapid.IntRange(0, 3).Draw(t, "keep")}
		old := r.drawOld()
		r.others = len(old) > 0
		r.durable = []durable{{}}
		r.open()
		for r.next < len(r.steps) {
			switch rapid.SampledFrom([]string{"emit", "emit", "emit", "take", "sync", "crash"}).Draw(t, "what") {
			case "emit":
				r.must(r.sink.Emit(r.steps[r.next]))
				r.next++
			case "take":
				at := r.sink.Place()
				r.taken = &durable{&at, r.next}
			case "sync":
				r.save()
			case "crash":
				r.crash()
				r.open()
			}
		}
		r.must(r.sink.End())
		for range 2 {
			at := r.sink.Place()
			r.taken = &durable{&at, r.next}
			r.save()
		}
		r.must(r.sink.Close())
		r.compare("readings", func(l Lines) []byte { return l.Readings }, r.cfg.MaxBytes, r.cfg.Keep)
		r.compare("alarms", func(l Lines) []byte { return l.Alarms }, 0, 0)
		r.find(old)
	})
}

func (r *run) must(err error) {
	r.Helper()
	if err != nil {
		r.Fatal(err)
	}
}

// drawSteps are the lines of an undisturbed run. Lines repeat sometimes, as readings do not,
// so that a wrong place is not always seen at once.
func drawSteps(t *rapid.T) []Lines {
	rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "lines"), 0))
	steps := make([]Lines, rapid.IntRange(0, 40).Draw(t, "steps"))
	for i := range steps {
		for range rng.IntN(4) {
			steps[i].Readings = fmt.Appendf(steps[i].Readings, "{\"reading\":%d,\"of\":%q}\n", rng.IntN(2*len(steps)), strings.Repeat("x", rng.IntN(200)))
		}
		if rng.IntN(4) == 0 {
			steps[i].Alarms = fmt.Appendf(nil, "{\"alarm\":%d}\n", i)
		}
	}
	return steps
}

// drawOld lays files of others in the way.
func (r *run) drawOld() map[string]string {
	old := map[string]string{}
	any := rapid.Bool().Draw(r.T, "old files")
	for _, name := range []string{"readings.jsonl", "readings-1.jsonl", "readings-2.jsonl", "alarms.jsonl", "readings-before-1.jsonl"} {
		if !any || !rapid.Bool().Draw(r.T, "old "+name) {
			continue
		}
		text := ""
		if name == "readings.jsonl" {
			for _, s := range r.steps[:rapid.IntRange(0, len(r.steps)).Draw(r.T, "alike")] {
				text += string(s.Readings)
			}
		}
		text += "{\"old\":\"" + name + "\"}\n" + strings.Repeat("o", 300) + "\n"
		old[name] = text
		r.must(os.WriteFile(filepath.Join(r.dir, name), []byte(text), 0o644))
	}
	return old
}

// find sees that what others wrote is still there, under whatever name.
func (r *run) find(old map[string]string) {
	left := map[string]int{}
	for _, text := range readFolder(r.T, r.dir) {
		left[text]++
	}
	for name, text := range old {
		if left[text] != 1 {
			r.Fatalf("the old %s stands %d times in the folder, want once; there are %v", name, left[text], slices.Sorted(maps.Keys(readFolder(r.T, r.dir))))
		}
	}
}

func readFolder(t *rapid.T, dir string) map[string]string {
	names, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	out := map[string]string{}
	for _, e := range names {
		b, err := os.ReadFile(filepath.Join(dir, e.Name()))
		if err != nil {
			t.Fatal(err)
		}
		out[e.Name()] = string(b)
	}
	return out
}

// begun tells that nothing was written yet, so that nothing is known of what lies there.
func (s Spot) begun() bool { return s.Aside == 0 && s.Size == 0 }

func (r *run) logs() []*log { return []*log{r.sink.readings, r.sink.alarms} }

func (r *run) open() {
	from := rapid.SampledFrom(r.durable).Draw(r.T, "from")
	var err error
	r.sink, err = Open(r.cfg, from.place)
	r.must(err)
	r.messy = r.messy || r.next > 0 && (from.place == nil || from.place.Readings.begun() || from.place.Alarms.begun())
	r.next, r.taken = from.next, nil
	r.durable = slices.DeleteFunc(r.durable, func(d durable) bool { return d.next > from.next })
	r.synced = map[*log]Spot{}
	if from.place != nil {
		r.synced[r.sink.readings], r.synced[r.sink.alarms] = from.place.Readings, from.place.Alarms
	}
}

// save makes the checkpoint taken last durable.
func (r *run) save() {
	if r.taken == nil {
		return
	}
	for _, l := range r.logs() {
		r.synced[l] = l.place()
	}
	r.must(r.sink.Sync())
	r.must(r.sink.Durable(*r.taken.place))
	r.durable = append(r.durable, *r.taken)
	r.durable = r.durable[max(0, len(r.durable)-2):]
	r.taken = nil
}

// crash loses any part of what was not synced, and may leave bytes that nobody wrote.
func (r *run) crash() {
	for _, l := range r.logs() {
		if l.f == nil || l.ahead > 0 { // nothing was written to the present file
			if l.f != nil {
				r.must(l.f.Close())
			}
			continue
		}
		least := int64(0)
		if s := r.synced[l]; s.Aside == l.at.Aside {
			least = s.Size
		}
		size := rapid.Int64Range(least, l.at.Size).Draw(r.T, "left")
		r.must(l.f.Truncate(size))
		junk := rapid.SampledFrom([]string{"", "", "\x00\x00\x00", "{\"reading\":", "\n", strings.Repeat("\x00", 5000)}).Draw(r.T, "junk")
		if r.durable[len(r.durable)-1].place == nil && size == 0 {
			junk = "" // nothing tells it from a file of others
		}
		r.messy = r.messy || junk != ""
		_, err := l.f.WriteAt([]byte(junk), size)
		r.must(err)
		r.must(l.f.Close())
	}
}

// compare holds one log against the lines of an undisturbed run.
func (r *run) compare(stem string, of func(Lines) []byte, max int64, keep int) {
	var files [][]byte // those put aside, and the present one
	var now []byte
	for _, s := range r.steps {
		if now = append(now, of(s)...); max > 0 && int64(len(now)) >= max {
			files, now = append(files, now), nil
		}
	}
	files = append(files, now)
	want := map[string]string{}
	for i, b := range files {
		if keep == 0 || i >= len(files)-1-keep {
			want[fmt.Sprintf("%s-%d.jsonl", stem, i+1)] = string(b)
		}
	}
	delete(want, fmt.Sprintf("%s-%d.jsonl", stem, len(files)))
	want[stem+".jsonl"] = string(now)
	got := readFolder(r.T, r.dir)
	for name, text := range want {
		if b, ok := got[name]; !ok || b != text {
			r.Fatalf("%s: %d bytes (there: %v), want %d:\n got %.300q\nwant %.300q", name, len(b), ok, len(text), b, text)
		}
	}
	for name := range got {
		if _, ok := want[name]; !ok && strings.HasPrefix(name, stem) && !strings.Contains(name, "before") && (stem == "alarms" || r.cfg.MaxBytes > 0) {
			var n int
			if _, err := fmt.Sscanf(name, stem+"-%d.jsonl", &n); err == nil && n <= len(files)-1 {
				r.Errorf("%s should have been removed: keep %d of %d put aside", name, keep, len(files)-1)
			}
		}
	}
	for name, text := range got {
		if strings.Contains(name, "before") && !r.messy && !r.others {
			r.Errorf("%s was put away, and everything was ours", name)
		}
		if strings.HasPrefix(name, ".stillwell") {
			r.Errorf("%s is left over: %q", name, text)
		}
	}
}

// memory is a folder of the test in memory, where the system has one: a sync costs nothing there.
func memory(t *testing.T) string {
	t.Helper()
	dir, err := os.MkdirTemp("/dev/shm", "stillwell-test")
	if err != nil {
		return t.TempDir()
	}
	t.Cleanup(func() { os.RemoveAll(dir) })
	return dir
}
