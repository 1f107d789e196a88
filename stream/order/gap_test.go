package order

import (
	"context"
	"fmt"
	"testing"
	"time"

	"stillwell/stream"
)

// TestGap: a gap comes before all that it touches, reaches from what was still open when it
// began to the first event after it, and survives a restart that reads on behind it.
func TestGap(t *testing.T) {
	cfg := rules
	cfg.IDs = false
	part := &stream.Partition{Name: "p/0"}
	batch := func(positions, times []int64) *Batch {
		b := &Batch{Partition: part, Start: stream.Position{Offset: positions[0]}, Next: stream.Position{Offset: positions[len(positions)-1] + 1}}
		for i, at := range times {
			b.Event(base+at*second, 0, positions[i], nil)
			b.Keep(fmt.Appendf(b.Arena(), "%d", at))
		}
		return b
	}
	var log []string
	say := func(e Event) {
		if e.Gap != nil {
			log = append(log, fmt.Sprintf("gap %d to %d", (e.Gap.From-base)/second, (e.Gap.To-base)/second))
		} else {
			log = append(log, string(e.Payload))
		}
	}
	seq := New(cfg)
	seq.Open(part, nil)
	seq.Add(batch([]int64{0, 1, 2}, []int64{0, 20, 30}))
	seq.Release(base+14*second, say)
	seq.Gap(0)
	seq.Add(batch([]int64{9, 10}, []int64{60, 62}))
	states, settled := seq.States(), seq.Settled()

	again := New(cfg) // a restart reads on at the oldest event that is not settled
	again.Restore(base+14*second, settled)
	again.Open(part, &states[0])
	if at := states[0].At.Offset; at != 0 {
		t.Fatalf("reads on at %d, want the start of the batch with the oldest event that waits", at)
	}
	again.Add(batch([]int64{0, 1, 2}, []int64{0, 20, 30}))
	again.Gap(0)
	again.Add(batch([]int64{9, 10}, []int64{60, 62}))
	for name, s := range map[string]*Sequencer{"undisturbed": seq, "restarted": again} {
		log = nil
		s.Release(1<<62, say)
		seen := map[string]bool{}
		var once []string
		for _, l := range log {
			if !seen[l] {
				once = append(once, l)
			}
			seen[l] = true
		}
		if got, want := fmt.Sprint(once), "[gap 20 to 60 20 30 60 62]"; got != want {
			t.Errorf("%s: %s, want %s", name, got, want)
		}
		if got := s.Settled().Delivered; got != 5 {
			t.Errorf("%s: %d delivered, want 5", name, got)
		}
	}
	// Where the gap lies before the place to read on at, the checkpoint itself brings it.
	late := New(cfg)
	late.Open(part, nil)
	late.Add(batch([]int64{0}, []int64{0}))
	late.Gap(0)
	late.Add(batch([]int64{9, 10}, []int64{5, 60}))
	late.Release(base-11*second, say)
	st := late.States()
	if len(st[0].Gaps) != 1 {
		t.Fatalf("gaps in the checkpoint: %v, want one", st[0].Gaps)
	}
	resumed := New(cfg)
	resumed.Restore(base-11*second, late.Settled())
	resumed.Open(part, &st[0])
	log = nil
	resumed.Release(1<<62, say)
	if len(log) == 0 || log[0] != "gap -10 to 5" {
		t.Errorf("after reading on behind the gap: %v, want it first", log)
	}
}

// TestLevel: a partition far ahead of the watermark is held, and freed when the others
// have followed.
func TestLevel(t *testing.T) {
	cfg := rules
	cfg.IDs = false
	seq := New(cfg)
	parts := []*stream.Partition{{Name: "p/0"}, {Name: "p/1", Index: 1}}
	for _, p := range parts {
		seq.Open(p, nil)
	}
	add := func(i int, at int64) {
		b := &Batch{Partition: parts[i]}
		b.Event(base+at*second, 0, at, nil)
		seq.Add(b)
		seq.Level()
	}
	held := func(i int) bool {
		ctx, cancel := testContext(t)
		defer cancel()
		return parts[i].Wait(ctx) != nil
	}
	add(1, 0)
	add(0, 0)
	if held(0) || held(1) {
		t.Fatal("held although both are level")
	}
	add(0, 26) // 26 s ahead: twice the lateness and a step are 27 s
	if held(0) {
		t.Error("held too soon")
	}
	add(0, 28)
	if !held(0) || held(1) {
		t.Error("the one ahead is not held, or the other is")
	}
	add(1, 10)
	if held(0) {
		t.Error("still held after the other has followed")
	}
}

func testContext(t *testing.T) (context.Context, context.CancelFunc) {
	return context.WithTimeout(t.Context(), 5*time.Millisecond)
}
