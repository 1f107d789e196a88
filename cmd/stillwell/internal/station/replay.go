// Package station is the running program: it wires a source through decoding, order, shards
// and desk to the sinks, for a recorded stream (Replay) and a live one (Run).
package station

import (
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"sync"

	"stillwell/config"
	"stillwell/online"
	filesink "stillwell/sinks/file"
	"stillwell/stream/decode"
	"stillwell/stream/file"
	"stillwell/stream/order"
)

// ReplayOptions say what is replayed, and where to.
type ReplayOptions struct {
	From    []string // files or patterns; "-" is Stdin
	Stdin   io.Reader
	Out     string // folder for readings.jsonl, alarms.jsonl and counters.json; made if need be
	Workers int    // 0: as many as there are processors
	// Watch, if given, is called with the source before it runs, for a progress bar.
	Watch func(*file.Source)
}

// Counters are what became of every event, as counters.json has them.
type Counters struct {
	Stream  order.Verdicts             `json:"stream"`
	Studies map[string]online.Outcomes `json:"studies"`
}

// Replayed is what a replay tells at its end.
type Replayed struct {
	Counters  Counters
	Furthest  order.Furthest // the event that moved time furthest
	Malformed Reject         // the first malformed event, without its text
}

// first keeps the first of the malformed events: of the partition of the first name, that of
// the least position.
type first struct {
	mu   sync.Mutex
	any  bool
	kept Reject
}

func (f *first) put(r Reject) {
	f.mu.Lock()
	defer f.mu.Unlock()
	if c := cmp.Or(cmp.Compare(r.Partition, f.kept.Partition), cmp.Compare(r.Position, f.kept.Position)); !f.any || c < 0 {
		f.any, f.kept = true, Reject{Partition: r.Partition, Position: r.Position, Fault: r.Fault}
	}
}

// Replay runs recorded events through the engine in event time, as fast as it can.
func Replay(ctx context.Context, f *config.File, opt ReplayOptions) (Replayed, error) {
	var done Replayed
	if err := f.Plan.Compile(); err != nil {
		return done, err
	}
	paths, err := file.Expand(opt.From)
	if err != nil {
		return done, err
	}
	if !slices.Contains(paths, file.StdinName) {
		opt.Stdin = nil
	}
	src, err := file.New(file.Config{Paths: paths, Stdin: opt.Stdin, CSV: f.Stream.CSV, MaxLine: f.Stream.MaxLine})
	if err != nil {
		return done, err
	}
	counted, written := filepath.Join(opt.Out, "counters.json"), false
	readings, alarms := filepath.Join(opt.Out, "readings.jsonl"), filepath.Join(opt.Out, "alarms.jsonl")
	if err := apart(append(paths, f.Path), []string{readings, alarms, counted}); err != nil {
		return done, err
	}
	if opt.Watch != nil {
		opt.Watch(src)
	}
	if err := os.MkdirAll(opt.Out, 0o755); err != nil {
		return done, fmt.Errorf("the folder to write to cannot be made: %w; name another", err)
	}
	sink, err := filesink.Open(filesink.Config{Readings: readings, Alarms: alarms, Replace: true}, nil)
	if err != nil {
		return done, err
	}
	eng := newEngine(f.Plan, order.New(sequencing(f)), workersOr(opt.Workers), func(o online.Output) error {
		written = true
		lines, err := filesink.Encode(o)
		if err != nil {
			return err
		}
		return sink.Emit(lines)
	})
	var malformed first
	if err = replay(ctx, f, src, eng, opt, malformed.put); err == nil {
		err = sink.End()
	}
	if err := errors.Join(err, sink.Close()); err != nil {
		if written { // those of an earlier replay would be taken for this one's
			_ = os.Remove(counted)
		}
		return done, err
	}
	done.Counters, done.Furthest, done.Malformed = eng.counters(), eng.seq.Furthest(), malformed.kept
	return done, writeJSON(counted, done.Counters)
}

func replay(ctx context.Context, f *config.File, src *file.Source, eng *engine, opt ReplayOptions, malformed func(Reject)) error {
	in := newIntake(nil)
	var readers []*reader
	for range workersOr(opt.Workers) {
		r, err := newReader(f.Plan, rules(f), malformed)
		if err != nil {
			return err
		}
		readers = append(readers, r)
	}
	err := flow(ctx, src, in, readers, func(j *job) error {
		switch j.kind {
		case jobOpen:
			eng.seq.Open(j.part, nil)
		case jobChunk:
			return eng.add(j.batch)
		case jobEnd:
			eng.seq.End(j.part.Index)
			return eng.advance()
		case jobGap:
			return fmt.Errorf("%s: events between %d and %d are missing: %s", j.part.Name, j.gap[0], j.gap[1], j.why)
		}
		return nil
	})
	if err == nil {
		err = ctx.Err()
	}
	if err != nil {
		return err
	}
	return eng.finish()
}

func workersOr(n int) int {
	if n > 0 {
		return n
	}
	return runtime.GOMAXPROCS(0)
}

// sequencing are the file's rules for order.
func sequencing(f *config.File) order.Config {
	return order.Config{Lateness: f.Stream.Lateness, Remember: f.Stream.Remember, Ahead: f.Stream.Ahead,
		Every: f.Plan.Every, IDs: f.Stream.IDSlot >= 0}
}

// rules are the file's rules for reading raw events.
func rules(f *config.File) Rules {
	r := Rules{CSV: f.Stream.CSV, TimeSlot: -1, IDSlot: f.Stream.IDSlot,
		Earliest: f.Stream.From, Latest: f.Stream.To, MaxLine: f.Stream.MaxLine}
	if t := f.Stream.Time; !t.Kafka {
		r.TimeSlot = t.Slot
		r.TimeSpec = timeSpec(t)
	}
	return r
}

func timeSpec(t config.TimeField) decode.TimeSpec {
	for _, unit := range []string{"s", "ms", "us", "ns"} {
		if d, err := config.ParseDuration("1" + unit); err == nil && d == t.Unit {
			spec, _ := decode.UnixTime(unit)
			return spec
		}
	}
	return decode.RFC3339
}

func (e *engine) counters() Counters {
	c := Counters{Stream: e.seq.Settled(), Studies: map[string]online.Outcomes{}}
	for i := range e.plan.Studies {
		c.Studies[e.plan.Studies[i].Name] = e.outcomes(i)
	}
	return c
}

func writeJSON(path string, v any) error {
	b, err := json.MarshalIndent(v, "", " ")
	if err != nil {
		return err
	}
	return os.WriteFile(path, append(b, '\n'), 0o644)
}
