package kafka

import (
	"context"
	"fmt"
	"slices"
	"sync"
	"testing"
	"time"

	"go.uber.org/goleak"
	"go.uber.org/zap"
	"go.uber.org/zap/zaptest"

	"stillwell/stream"
)

func TestMain(m *testing.M) {
	goleak.VerifyTestMain(m)
}

// A recorder is a receiver that keeps all it gets, and objects to what a receiver may not see.
type recorder struct {
	t      testing.TB
	known  map[string]stream.Position // what Open answers
	refuse error                      // what Open fails with

	mu    sync.Mutex
	order []string // partitions as they were opened
	parts map[string]*recorded
}

type recorded struct {
	part     *stream.Partition
	messages []recordedMessage
	gaps     []recordedGap
	caughtUp int // how many messages had come at the last CaughtUp; -1: never
	confirms int // how often CaughtUp came
	marks    []string
	places   []stream.Position // announced
	busy     bool
}

type recordedMessage struct {
	offset int64
	value  string
	stamp  int64
}

type recordedGap struct {
	from, to int64
	why      string
}

func newRecorder(t testing.TB) *recorder {
	return &recorder{t: t, known: map[string]stream.Position{}, parts: map[string]*recorded{}}
}

func (r *recorder) Open(name string) (*stream.Partition, stream.Position, bool, error) {
	r.mu.Lock()
	defer r.mu.Unlock()
	if r.refuse != nil {
		return nil, stream.Position{}, false, r.refuse
	}
	if r.parts[name] != nil {
		r.t.Errorf("%s is opened twice", name)
	}
	p := &stream.Partition{Name: name, Index: len(r.parts)}
	r.parts[name] = &recorded{part: p, caughtUp: -1}
	r.order = append(r.order, name)
	at, ok := r.known[name]
	return p, at, ok, nil
}

// enter catches two calls for one partition at a time.
func (r *recorder) enter(p *stream.Partition) (*recorded, func()) {
	r.mu.Lock()
	in := r.parts[p.Name]
	if in.busy {
		r.t.Errorf("%s: two calls at a time", p.Name)
	}
	in.busy = true
	r.mu.Unlock()
	return in, func() {
		r.mu.Lock()
		in.busy = false
		r.mu.Unlock()
	}
}

func (r *recorder) Chunk(ctx context.Context, c *stream.Chunk) error {
	in, leave := r.enter(c.Partition)
	defer leave()
	r.mu.Lock()
	defer r.mu.Unlock()
	if c.Messages == nil {
		r.t.Errorf("%s: a chunk of lines", c.Partition.Name)
	}
	if len(c.Messages) == 0 {
		in.places = append(in.places, stream.Position{Offset: c.Base, Mark: c.Mark})
	}
	for _, m := range c.Messages {
		in.messages = append(in.messages, recordedMessage{m.Offset, string(c.Data[m.Start:m.End]), m.Stamp})
	}
	if len(c.Messages) > 0 && !slices.Contains(in.marks, c.Mark) {
		in.marks = append(in.marks, c.Mark)
	}
	for i := range c.Data { // whoever still reads this after Release is found out
		c.Data[i] = '#'
	}
	c.Release()
	return ctx.Err()
}

func (r *recorder) End(p *stream.Partition) { r.t.Errorf("%s has ended, but topics never do", p.Name) }

func (r *recorder) CaughtUp(p *stream.Partition) {
	in, leave := r.enter(p)
	defer leave()
	r.mu.Lock()
	defer r.mu.Unlock()
	in.caughtUp = len(in.messages)
	in.confirms++
}

func (r *recorder) Gap(p *stream.Partition, from, to int64, why string) {
	in, leave := r.enter(p)
	defer leave()
	r.mu.Lock()
	defer r.mu.Unlock()
	in.gaps = append(in.gaps, recordedGap{from, to, why})
}

// look returns what has come of a partition so far.
func (r *recorder) look(name string) recorded {
	r.mu.Lock()
	defer r.mu.Unlock()
	if r.parts[name] == nil {
		return recorded{caughtUp: -1}
	}
	return *r.parts[name]
}

func (r *recorder) opened() []string {
	r.mu.Lock()
	defer r.mu.Unlock()
	return slices.Clone(r.order)
}

func (r recorded) offsets() []int64 {
	var out []int64
	for _, m := range r.messages {
		out = append(out, m.offset)
	}
	return out
}

func (r recorded) values() []string {
	var out []string
	for _, m := range r.messages {
		out = append(out, m.value)
	}
	return out
}

// eventually waits until what is asked for has come.
func eventually(t testing.TB, what string, ok func() bool) {
	t.Helper()
	within(t, 20*time.Second, what, ok)
}

func within(t testing.TB, limit time.Duration, what string, ok func() bool) {
	t.Helper()
	for deadline := time.Now().Add(limit); !ok(); time.Sleep(5 * time.Millisecond) {
		if time.Now().After(deadline) {
			t.Fatalf("not in %v: %s", limit, what)
		}
	}
}

// start runs a source until the test ends, or stop is called; Run must then have ended without an error.
func start(t testing.TB, conf Config, to stream.Receiver) (s *Source, stop func()) {
	t.Helper()
	if conf.Log == nil {
		conf.Log = zaptest.NewLogger(t, zaptest.Level(zap.WarnLevel))
	}
	s, err := New(conf)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan error, 1)
	go func() { done <- s.Run(ctx, to) }()
	stop = sync.OnceFunc(func() {
		cancel()
		select {
		case err := <-done:
			if err != nil {
				t.Errorf("Run: %v", err)
			}
		case <-time.After(10 * time.Second):
			t.Error("Run does not end")
		}
	})
	t.Cleanup(stop)
	return s, stop
}

// numbered are n values, each one of a kind.
func numbered(prefix string, from, n int) [][]byte {
	out := make([][]byte, n)
	for i := range out {
		out[i] = fmt.Appendf(nil, "%s %d", prefix, from+i)
	}
	return out
}

func texts(values [][]byte) []string {
	var out []string
	for _, v := range values {
		out = append(out, string(v))
	}
	return out
}

func upTo(from, to int64) []int64 {
	var out []int64
	for ; from < to; from++ {
		out = append(out, from)
	}
	return out
}
