package station

import (
	"bytes"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"testing"
	"time"

	"go.uber.org/zap"

	"stillwell/config"
	filesink "stillwell/sinks/file"
	"stillwell/stream"
	"stillwell/stream/checkpoint"
	"stillwell/stream/order"
)

// handFed is a station that is fed by hand.
type handFed struct {
	t    *testing.T
	st   *station
	part *stream.Partition
	read *reader
	at   int64
}

func newHandFed(t *testing.T, f *config.File, dir string) *handFed {
	t.Helper()
	store, err := checkpoint.Open(filepath.Join(dir, "state"), checkpoint.Options{})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { store.Close() })
	if _, err := store.Load(); err != nil {
		t.Fatal(err)
	}
	b := &handFed{t: t, st: &station{file: f, log: zap.NewNop(), known: map[string]order.State{}, vitals: &vitals{}}, part: &stream.Partition{Name: "part-0"}}
	b.st.eng = newEngine(f.Plan, order.New(sequencing(f)), 1, b.st.step)
	b.st.eng.patience = patience
	if b.st.sink, err = filesink.Open(filesink.Config{Readings: filepath.Join(dir, "readings.jsonl")}, nil); err != nil {
		t.Fatal(err)
	}
	b.st.keeper = newKeeper(store, time.Hour, zap.NewNop(), b.st.sink, nil)
	if b.read, err = newReader(f.Plan, rules(f), nil); err != nil {
		t.Fatal(err)
	}
	b.st.eng.seq.Open(b.part, nil)
	return b
}

func (b *handFed) feed(lines []byte) {
	b.t.Helper()
	batch := &order.Batch{}
	b.read.read(&stream.Chunk{Partition: b.part, Data: lines, Base: b.at, Release: func() {}}, batch)
	b.at += int64(len(lines))
	if err := b.st.eng.add(batch); err != nil {
		b.t.Fatal(err)
	}
}

func (b *handFed) save() error {
	if !b.st.eng.clean {
		b.t.Fatal("between steps")
	}
	b.st.keeper.take(b.st.eng, b.st.meta(nil))
	return b.st.keeper.save()
}

// TestSyncFails: when the sink's files cannot be made durable there is no checkpoint, and the
// next one holds everything all the same.
func TestSyncFails(t *testing.T) {
	root := t.TempDir()
	f, err := config.Parse(filepath.Join(root, "study.yaml"), []byte(benchStudy))
	if err != nil {
		t.Fatal(err)
	}
	f.Plan.Every = 10 * time.Minute
	lines := ferryParts(3, 1)[0]
	cut := bytes.LastIndexByte(lines[:len(lines)/2], '\n') + 1
	var pages [2]map[string][]byte
	for i, fails := range []bool{false, true} {
		dir := filepath.Join(root, []string{"calm", "failing"}[i])
		if err := os.Mkdir(dir, 0o755); err != nil {
			t.Fatal(err)
		}
		if err := f.Plan.Compile(); err != nil {
			t.Fatal(err)
		}
		b := newHandFed(t, f, dir)
		b.st.keeper.removed = []string{"gone/shard/0/head"}
		b.feed(lines[:cut])
		if fails {
			// A new file's name cannot be made durable while its folder is away.
			away := dir + "-away"
			if err := os.Rename(dir, away); err != nil {
				t.Fatal(err)
			}
			if err := b.save(); err == nil {
				t.Fatal("a checkpoint was written, though what its place says was not durable")
			}
			if err := os.Rename(away, dir); err != nil {
				t.Fatal(err)
			}
			if got := b.st.keeper.removed; !slices.Equal(got, []string{"gone/shard/0/head"}) {
				t.Errorf("to be removed by the next checkpoint: %v", got)
			}
		} else if err := b.save(); err != nil {
			t.Fatal(err)
		}
		b.feed(lines[cut:])
		if err := b.save(); err != nil {
			t.Fatal(err)
		}
		store, err := checkpoint.OpenReadOnly(filepath.Join(dir, "state"), checkpoint.Options{})
		if err != nil {
			t.Fatal(err)
		}
		snap, err := store.Load()
		if err != nil {
			t.Fatal(err)
		}
		pages[i] = snap.Pages
	}
	if len(pages[0]) < 100 {
		t.Fatalf("%d pages are too few to tell anything", len(pages[0]))
	}
	for _, name := range slices.Sorted(maps.Keys(pages[0])) {
		if !bytes.Equal(pages[0][name], pages[1][name]) {
			t.Errorf("page %s has %d bytes after the failure, %d without, and not the same", name, len(pages[1][name]), len(pages[0][name]))
		}
	}
}
