package station

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"reflect"
	"testing"
	"time"

	"go.uber.org/zap"
	"pgregory.net/rapid"

	"stillwell/cmd/stillwell/internal/ferry"
	"stillwell/config"
	"stillwell/online"
	filesink "stillwell/sinks/file"
	"stillwell/stream"
	"stillwell/stream/checkpoint"
	"stillwell/stream/order"
)

// shuffled is a source of partitions held in memory, which it hands over in any interleaving
// and any chunks; it fails when told to.
type shuffled struct {
	t      *rapid.T
	parts  [][]byte // whole lines
	broken int      // chunks until it fails; -1: never
}

var errPulled = errors.New("the plug was pulled")

func (s *shuffled) Run(ctx context.Context, to stream.Receiver) error {
	next := make([]int, len(s.parts))
	handles := make([]*stream.Partition, len(s.parts))
	for i := range s.parts {
		p, from, _, err := to.Open(fmt.Sprint("part-", i))
		if err != nil {
			return err
		}
		handles[i], next[i] = p, int(from.Offset)
	}
	var open []int
	for i := range s.parts {
		if next[i] < len(s.parts[i]) {
			open = append(open, i)
		} else {
			to.End(handles[i])
		}
	}
	for len(open) > 0 {
		if s.broken == 0 {
			return errPulled
		}
		s.broken--
		k := rapid.IntRange(0, len(open)-1).Draw(s.t, "partition")
		i := open[k]
		rest := s.parts[i][next[i]:]
		n := min(len(rest), rapid.IntRange(1, 6000).Draw(s.t, "bytes"))
		if cut := bytes.IndexByte(rest[n-1:], '\n'); cut >= 0 {
			n += cut
		}
		if err := to.Chunk(ctx, &stream.Chunk{Partition: handles[i], Data: rest[:n], Base: int64(next[i]), Release: func() {}}); err != nil {
			return err
		}
		if next[i] += n; next[i] == len(s.parts[i]) {
			to.End(handles[i])
			open = append(open[:k], open[k+1:]...)
		}
	}
	return nil
}

// TestAnyPlan: interleaving, chunks, workers and crashes change no byte of readings, alarms
// and counters.
func TestAnyPlan(t *testing.T) {
	f, err := config.Parse(filepath.Join(t.TempDir(), "study.yaml"), []byte(benchStudy))
	if err != nil {
		t.Fatal(err)
	}
	f.Plan.Every = 10 * time.Minute
	if err := f.Plan.Compile(); err != nil {
		t.Fatal(err)
	}
	rapid.Check(t, func(t *rapid.T) {
		parts := ferryParts(rapid.Uint64Range(1, 50).Draw(t, "seed"), rapid.IntRange(1, 3).Draw(t, "partitions"))
		want := runPlan(t, f, parts, 1, 0)
		got := runPlan(t, f, parts, rapid.IntRange(1, 4).Draw(t, "workers"), rapid.IntRange(0, 4).Draw(t, "crashes"))
		if !bytes.Equal(got.readings, want.readings) {
			t.Fatalf("readings differ: %s", firstDifference(got.readings, want.readings))
		}
		if !bytes.Equal(got.alarms, want.alarms) {
			t.Fatalf("alarms differ: %s", firstDifference(got.alarms, want.alarms))
		}
		if !reflect.DeepEqual(got.counters, want.counters) {
			t.Fatalf("counters: got %+v, want %+v", got.counters, want.counters)
		}
		requireSound(t, want)
		requireSound(t, got)
		if len(want.readings) == 0 || want.counters.Stream.Duplicate == 0 {
			t.Fatal("the stream is too tame for this test")
		}
	})
}

func ferryParts(seed uint64, n int) [][]byte {
	site := ferry.New(ferry.Config{Seed: seed, From: time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC), PerHour: 30, Effect: 0.5, Disordered: true})
	parts := make([][]byte, n)
	for i := range 4000 {
		line, _ := site.Next()
		k := (i * 7919 / 13) % n
		parts[k] = append(append(parts[k], line...), '\n')
	}
	return parts
}

type result struct {
	readings, alarms []byte
	counters         Counters
	audited          []online.Audited
	eng              *engine
}

func runPlan(t *rapid.T, f *config.File, parts [][]byte, workers, crashes int) result {
	dir, err := os.MkdirTemp("", "plan")
	if err != nil {
		t.Fatal(err)
	}
	defer os.RemoveAll(dir)
	for {
		broken := -1
		if crashes > 0 {
			broken = rapid.SampledFrom([]int{0, 1, 10, 40, 100, 200, 400}).Draw(t, "until the crash")
			crashes--
		}
		r, err := runOnce(t, f, parts, dir, workers, broken)
		if err == nil {
			return r
		}
		if !errors.Is(err, errPulled) {
			t.Fatal(err)
		}
	}
}

// runOnce is Run with a source of ours, and without a last checkpoint where it fails.
func runOnce(t *rapid.T, f *config.File, parts [][]byte, dir string, workers, broken int) (r result, err error) {
	store, err := checkpoint.Open(filepath.Join(dir, "state"), checkpoint.Options{})
	if err != nil {
		return r, err
	}
	defer store.Close()
	snap, err := store.Load()
	if err != nil {
		return r, err
	}
	st := &station{file: f, log: zap.NewNop(), known: map[string]order.State{}, vitals: &vitals{}}
	st.eng = newEngine(f.Plan, order.New(sequencing(f)), workers, st.step)
	st.eng.patience = rapid.SampledFrom([]int{0, 200, patience}).Draw(t, "patience")
	var meta Meta
	if snap != nil {
		if meta, _, err = restore(snap, f, nil, st.eng); err != nil {
			return r, err
		}
	}
	for _, s := range meta.Streams {
		st.known[s.Name] = s
	}
	if st.sink, err = filesink.Open(filesink.Config{Readings: filepath.Join(dir, "readings.jsonl")}, meta.Sink); err != nil {
		return r, err
	}
	st.keeper = newKeeper(store, 0, zap.NewNop(), st.sink, nil)
	var readers []*reader
	for range workers {
		rd, err := newReader(f.Plan, rules(f), nil)
		if err != nil {
			return r, err
		}
		readers = append(readers, rd)
	}
	err = flow(context.Background(), &shuffled{t, parts, broken}, newIntake(meta.Streams), readers, st.handle)
	if st.keeper.writing != nil {
		<-st.keeper.writing
	}
	if err != nil {
		return r, errors.Join(err, st.sink.Close())
	}
	st.ending = true
	if err := errors.Join(st.eng.finish(), st.sink.Close()); err != nil {
		return r, err
	}
	r.counters, r.eng = st.eng.counters(), st.eng
	r.audited = st.eng.audit()
	if r.readings, err = os.ReadFile(filepath.Join(dir, "readings.jsonl")); err != nil {
		return r, err
	}
	r.alarms, err = os.ReadFile(filepath.Join(dir, "alarms.jsonl"))
	return r, err
}

// requireSound fails where sums are not those of the rows.
func requireSound(t *rapid.T, r result) {
	for _, a := range r.audited {
		if a.Off > 1e-13 || a.Units == 0 {
			t.Fatalf("study %s: sums over %d units differ by %g from those of its rows", a.Study, a.Units, a.Off)
		}
	}
}

func firstDifference(a, b []byte) string {
	as, bs := bytes.Split(a, []byte("\n")), bytes.Split(b, []byte("\n"))
	for i := range min(len(as), len(bs)) {
		if !bytes.Equal(as[i], bs[i]) {
			return fmt.Sprintf("line %d:\n got %s\nwant %s", i+1, as[i], bs[i])
		}
	}
	return fmt.Sprintf("%d lines, want %d", len(as), len(bs))
}
