package order

import (
	"fmt"
	"slices"
	"testing"
	"time"

	"pgregory.net/rapid"

	"stillwell/stream"
)

// raw is an event as a partition holds it; its position is its index.
type raw struct {
	at     int64
	id     string
	broken bool
	stamp  int64
}

const (
	second = int64(time.Second)
	base   = 1_000_000 * second
)

var rules = Config{Lateness: 10 * time.Second, Remember: 10 * time.Second, Ahead: time.Hour, Every: 7 * time.Second, IDs: true}

func drawPartitions(t *rapid.T) [][]raw {
	ids := rapid.IntRange(1, 40)
	var out [][]raw
	for range rapid.IntRange(1, 3).Draw(t, "partitions") {
		at := base + rapid.Int64Range(0, 30).Draw(t, "begin")*second
		events := []raw{{at: at, id: "first"}} // one that is in time, so that the partition has one
		for range rapid.IntRange(0, 60).Draw(t, "events") {
			at += rapid.Int64Range(0, 4).Draw(t, "on") * second
			e := raw{at: at - rapid.Int64Range(0, 14).Draw(t, "back")*second, id: fmt.Sprintf("e-%d", ids.Draw(t, "id"))}
			switch rapid.IntRange(0, 11).Draw(t, "kind") {
			case 0:
				e.broken = true
			case 1:
				e.stamp = e.at - 2*3600*second // dated far after its stamp
			case 2:
				e.stamp = e.at - 3*second
			}
			events = append(events, e)
		}
		out = append(out, events)
	}
	return out
}

// run feeds partitions in a drawn interleaving, perhaps with restarts, and tells what
// each step released, with the verdicts settled by then.
func run(t *rapid.T, cfg Config, parts [][]raw, restarts bool) []string {
	var log []string
	seq, next := New(cfg), make([]int, len(parts))
	open := func(states []State) {
		for i := range parts {
			p := &stream.Partition{Name: fmt.Sprint("p/", i), Index: i}
			var st *State
			if states != nil {
				st = &states[i]
				next[i] = int(st.At.Offset)
			}
			seq.Open(p, st)
		}
	}
	open(nil)
	handed := map[*Batch]bool{}
	say := func(e Event) { log = append(log, fmt.Sprintf("%d %v %s", (e.At-base)/second, e.Late, e.Payload)) }
	step := Never
	advance := func() bool {
		w := seq.Watermark()
		at, ok := seq.Waiting()
		if !ok || w == Never {
			return false
		}
		T := (max(at, step+1) + int64(cfg.Every) - 1) / int64(cfg.Every) * int64(cfg.Every)
		if at == Never || T >= w {
			return false
		}
		seq.Release(T, say)
		seq.Recycle()
		step = T
		log = append(log, fmt.Sprintf("step %d %+v", (T-base)/second, seq.Settled()))
		return true
	}
	for {
		var more []int
		for i := range parts {
			if next[i] < len(parts[i]) {
				more = append(more, i)
			}
		}
		if len(more) == 0 {
			break
		}
		i := rapid.SampledFrom(more).Draw(t, "partition")
		n := min(len(parts[i])-next[i], rapid.IntRange(1, 9).Draw(t, "batch"))
		b := &Batch{Partition: seq.parts[i].of, Start: stream.Position{Offset: int64(next[i])}, Next: stream.Position{Offset: int64(next[i] + n)}}
		b.Recycle = func(b *Batch) {
			if !handed[b] {
				t.Fatal("a batch was recycled twice, or before it was added")
			}
			delete(handed, b)
		}
		for k := next[i]; k < next[i]+n; k++ {
			e := parts[i][k]
			if e.broken {
				b.Malformed(int64(k))
				continue
			}
			b.Event(e.at, e.stamp, int64(k), []byte(e.id))
			b.Keep(fmt.Appendf(b.Arena(), "%s@%d/%d", e.id, i, k))
		}
		next[i] += n
		handed[b] = true
		seq.Add(b)
		for advance() {
			if restarts && rapid.IntRange(0, 3).Draw(t, "restart") == 0 {
				states, settled := seq.States(), seq.Settled()
				seq = New(cfg)
				seq.Restore(step, settled)
				clear(handed)
				open(states)
			}
		}
	}
	for i := range parts {
		seq.End(i)
	}
	for advance() {
	}
	seq.Release(1<<62, say)
	seq.Recycle()
	if len(handed) > 0 {
		t.Fatalf("%d batches never recycled", len(handed))
	}
	return append(log, fmt.Sprintf("end %+v", seq.Settled()))
}

// TestInterleaving: what is delivered, and every count at every step, depends on the
// partitions alone; not on how they interleave, how they are batched, or on restarts.
func TestInterleaving(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		parts := drawPartitions(t)
		cfg := rules
		cfg.Remember = time.Duration(rapid.Int64Range(10, 25).Draw(t, "remember")) * time.Second
		cfg.IDs = rapid.Bool().Draw(t, "ids")
		want := run(t, cfg, parts, false)
		for _, restarts := range []bool{false, true} {
			if got := run(t, cfg, parts, restarts); !slices.Equal(got, want) {
				for i := range min(len(got), len(want)) {
					if got[i] != want[i] {
						t.Fatalf("restarts %v: line %d: got %s, want %s", restarts, i, got[i], want[i])
					}
				}
				t.Fatalf("restarts %v: %d lines, want %d", restarts, len(got), len(want))
			}
		}
	})
}

// TestAgainstPlainRules judges one partition event by event, as one would with paper and
// pencil, and compares the counts. An id always comes with the same time there: which of
// several times counts is a matter of canonical order, not of arrival.
func TestAgainstPlainRules(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		part := drawPartitions(t)[0]
		for i := range part {
			part[i].id = fmt.Sprintf("%s@%d", part[i].id[:3], part[i].at)
		}
		var want Verdicts
		seen := map[string]int64{}
		newest := Never
		delivered := map[string]int64{} // id -> earliest time
		for _, e := range part {
			want.Read++
			last, known := seen[e.id]
			switch {
			case e.broken:
				want.Malformed++
			case e.stamp != 0 && e.at-e.stamp > int64(rules.Ahead):
				want.Ahead++
			default:
				late := newest != Never && e.at < newest-int64(rules.Lateness)
				if !late {
					to := e.at
					if e.stamp != 0 {
						to = min(to, e.stamp)
					}
					newest = max(newest, to)
				}
				remembered := known && last >= newest-int64(rules.Remember)
				switch {
				case remembered:
					want.Duplicate++
				case late:
					want.Late++
				default:
					want.Delivered++
					delivered[e.id] = e.at
				}
				if !late {
					seen[e.id] = max(seen[e.id], e.at)
				}
			}
		}
		log := run(t, rules, [][]raw{part}, false)
		if got := log[len(log)-1]; got != fmt.Sprintf("end %+v", want) {
			t.Fatalf("got %s, want %+v", got, want)
		}
	})
}

// TestSilentPartition: a partition that is left out holds nothing up, and what it brings
// for released steps afterwards is late.
func TestSilentPartition(t *testing.T) {
	cfg := rules
	cfg.IDs = false
	seq := New(cfg)
	for i := range 2 {
		seq.Open(&stream.Partition{Name: fmt.Sprint("p/", i), Index: i}, nil)
	}
	add := func(i int, at int64) {
		b := &Batch{Partition: seq.parts[i].of}
		b.Event(base+at*second, 0, 0, nil)
		seq.Add(b)
	}
	add(0, 0)
	add(0, 100)
	if w := seq.Watermark(); w != Never {
		t.Fatalf("watermark %d while a partition has said nothing", w)
	}
	seq.SetIdle(1)
	if w := seq.Watermark(); w != base+90*second {
		t.Fatalf("watermark %d, want that of the partition that speaks", w-base)
	}
	seq.Release(base+70*second, func(Event) {})
	add(1, 60)
	add(1, 80)
	seq.SetIdle(0)
	seq.SetIdle(1)
	if w := seq.Watermark(); w != base+90*second {
		t.Fatalf("watermark %d after all fell silent, want it where it was", w-base)
	}
	seq.Release(1<<62, func(Event) {})
	if got, want := seq.Settled(), (Verdicts{Read: 4, Delivered: 3, Late: 1}); got != want {
		t.Fatalf("got %+v, want %+v", got, want)
	}
}

func TestSliceBounds(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var s pool
		s.init(Config{Every: time.Duration(rapid.Int64Range(1, 4000).Draw(t, "every")) * time.Millisecond * 10, Lateness: time.Duration(rapid.Int64Range(0, 5000).Draw(t, "lateness")) * time.Millisecond})
		at := base + rapid.Int64Range(-1e12, 1e12).Draw(t, "at")
		i := s.indexOf(at)
		if lo, hi := s.end(i-1), s.end(i); !(lo < at && at <= hi) {
			t.Fatalf("%d in slice %d, which goes from %d to %d", at, i, lo, hi)
		}
		step := (at + s.every - 1) / s.every * s.every
		if s.end(i) > step {
			t.Fatalf("slice %d of %d reaches beyond its step's end %d", i, at, step)
		}
	})
}
