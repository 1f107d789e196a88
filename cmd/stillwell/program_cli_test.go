package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"maps"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"stillwell/cmd/stillwell/internal/ferry"
)

// asProgram makes the test binary be the program itself, so that tests see what a shell sees.
const asProgram = "STILLWELL_TEST_AS_PROGRAM"

func TestMain(m *testing.M) {
	if os.Getenv(asProgram) != "" {
		main()
	}
	os.Exit(m.Run())
}

// patience is how long anything may take that should take a moment.
const patience = 60 * time.Second

// program is a command that has been started.
type program struct {
	*exec.Cmd
	t           *testing.T
	out, errout *buffer
	done        chan struct{}
}

// buffer can be read while a program writes to it.
type buffer struct {
	mu sync.Mutex
	b  bytes.Buffer
}

func (b *buffer) Write(p []byte) (int, error) {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.b.Write(p)
}

func (b *buffer) String() string {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.b.String()
}

// launch starts the program in a folder.
func launch(t *testing.T, dir string, stdin io.Reader, args ...string) *program {
	t.Helper()
	p := &program{Cmd: exec.Command(os.Args[0], args...), t: t, out: &buffer{}, errout: &buffer{}, done: make(chan struct{})}
	p.Env = append(os.Environ(), asProgram+"=1", "GORACE=halt_on_error=1 atexit_sleep_ms=0")
	p.Dir, p.Stdin, p.Stdout, p.Stderr = dir, stdin, p.out, p.errout
	p.begin()
	return p
}

// begin starts the command, which the end of the test ends.
func (p *program) begin() {
	p.t.Helper()
	if err := p.Start(); err != nil {
		p.t.Fatal(err)
	}
	go func() {
		_ = p.Wait()
		close(p.done)
	}()
	p.t.Cleanup(func() {
		_ = p.Process.Kill()
		<-p.done
	})
}

// end waits for the program and returns its exit code.
func (p *program) end() int {
	p.t.Helper()
	select {
	case <-p.done:
		return p.ProcessState.ExitCode()
	case <-time.After(patience):
		p.t.Fatalf("%v is still running after %s\n%s", p.Args[1:], patience, p.errout)
		return -1
	}
}

// terminated asks the program to stop, as an operator would, and wants exit 0.
func (p *program) terminated() {
	p.t.Helper()
	if err := p.Process.Signal(syscall.SIGTERM); err != nil && !errors.Is(err, os.ErrProcessDone) {
		p.t.Fatal(err)
	}
	if code := p.end(); code != exitDone {
		p.t.Fatalf("exit %d after SIGTERM\n%s", code, p.errout)
	}
}

// invoke runs the program to its end and wants an exit code.
func invoke(t *testing.T, dir string, code int, args ...string) (stdout, stderr string) {
	t.Helper()
	p := launch(t, dir, nil, args...)
	if got := p.end(); got != code {
		t.Fatalf("stillwell %s: exit %d, want %d\n%s%s", strings.Join(args, " "), got, code, p.out, p.errout)
	}
	return p.out.String(), p.errout.String()
}

// until waits for something to come about.
func until(t *testing.T, what string, ok func() bool) {
	t.Helper()
	ctx, cancel := context.WithTimeout(t.Context(), patience)
	defer cancel()
	for !ok() {
		select {
		case <-ctx.Done():
			t.Fatalf("waited %s for %s", patience, what)
		case <-time.After(10 * time.Millisecond):
		}
	}
}

// folder is a folder of a test, in memory where the system has room for that: a sync costs nothing there.
func folder(t *testing.T) string {
	t.Helper()
	dir, err := os.MkdirTemp("/dev/shm", "stillwell-test-")
	if err != nil {
		return t.TempDir()
	}
	t.Cleanup(func() {
		if err := os.RemoveAll(dir); err != nil {
			t.Error(err)
		}
	})
	return dir
}

// put writes a file of a test.
func put(t *testing.T, path, text string) {
	t.Helper()
	if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
}

// text reads a file of a test.
func text(t *testing.T, path string) string {
	t.Helper()
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

// mentions wants a message with every part.
func mentions(t *testing.T, message string, parts ...string) {
	t.Helper()
	for _, part := range parts {
		if !strings.Contains(message, part) {
			t.Errorf("the message lacks %q:\n%s", part, message)
		}
	}
}

// tickets are lines of the ferry company's site.
func tickets(seed uint64, n int) []string {
	site := ferry.New(ferry.Config{Seed: seed, From: time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC), PerHour: 60, Effect: 0.3, Disordered: true})
	lines := make([]string, n)
	for i := range lines {
		line, _ := site.Next()
		lines[i] = string(line)
	}
	return lines
}

func joined(lines []string) string { return strings.Join(lines, "\n") + "\n" }

// siteStudy is a study file on the site's events, with more lines for its stream and at its end.
func siteStudy(stream, end string) string {
	return `stream:
  ` + strings.ReplaceAll(strings.TrimSpace(stream), "\n", "\n  ") + `
  time: ts
  id: id
  lateness: 2m
studies:
  - name: seat-map
    units:
      key: passenger
      entry: type == "assign" && trial == "seat-map"
      arm: arm
      baseline: current
      arms: {current: 1, wide: 1}
      follow_up: 6h
      by: [platform]
    tallies:
      visits:    {count: 'type == "visit"'}
      fare:      {sum: amount, when: 'type == "ticket"'}
      dearest:   {max: amount, when: 'type == "ticket"'}
      past_fare: {sum: amount, when: 'type == "ticket"', before: 48h}
    estimates:
      fare_per_passenger: {of: mean(fare), contrast: relative, adjust: [past_fare]}
      fare_per_visit:     {of: mean(fare) / mean(visits), contrast: difference}
      dearest_fare:       {of: mean(dearest)}
    watches:
      - {on: fare_per_visit, against: '== 0', error: 0.05, tune_for: 500}
  - name: payments
    units: {every: 5m}
    tallies:
      slow: {count: 'type == "pay" && ms > 300'}
      pays: {count: 'type == "pay"'}
    estimates:
      share_slow: {of: mean(slow) / mean(pays)}
readings: {every: 10m}
` + end
}

// counters are what counters.json says.
type counters struct {
	Stream  map[string]int64            `json:"stream"`
	Studies map[string]map[string]int64 `json:"studies"`
}

// add adds up two counters.
func (c counters) add(stream map[string]int64, studies map[string]map[string]int64) counters {
	sum := counters{maps.Clone(c.Stream), map[string]map[string]int64{}}
	for k, n := range stream {
		sum.Stream[k] += n
	}
	for name, parts := range c.Studies {
		sum.Studies[name] = maps.Clone(parts)
		for k, n := range studies[name] {
			sum.Studies[name][k] += n
		}
	}
	return sum
}

// check wants the parts to add up, so that every event is counted exactly once.
func (c counters) check(t *testing.T) {
	t.Helper()
	total := int64(0)
	for _, k := range []string{"delivered", "malformed", "late", "duplicate", "ahead"} {
		total += c.Stream[k]
	}
	if total != c.Stream["read"] {
		t.Errorf("the parts of stream add up to %d: %v", total, c.Stream)
	}
	for name, parts := range c.Studies {
		total := int64(0)
		for _, n := range parts {
			total += n
		}
		if total != c.Stream["delivered"] {
			t.Errorf("the parts of %s add up to %d, and %d were delivered: %v", name, total, c.Stream["delivered"], parts)
		}
	}
}

func (c counters) String() string {
	text := fmt.Sprint("stream ", c.Stream)
	for _, name := range slices.Sorted(maps.Keys(c.Studies)) {
		text += fmt.Sprint("; ", name, " ", c.Studies[name])
	}
	return text
}

// replayed is what a replay wrote.
type replayed struct {
	readings, alarms string
	counters         counters
	stderr           string
}

// replay runs a study file over recorded events.
func replay(t *testing.T, dir, study string, from ...string) replayed {
	t.Helper()
	out := folder(t)
	args := []string{"replay", study, "--out", out}
	for _, f := range from {
		args = append(args, "--from", f)
	}
	_, stderr := invoke(t, dir, exitDone, args...)
	r := replayed{readings: text(t, filepath.Join(out, "readings.jsonl")), alarms: text(t, filepath.Join(out, "alarms.jsonl")), stderr: stderr}
	if err := json.Unmarshal([]byte(text(t, filepath.Join(out, "counters.json"))), &r.counters); err != nil {
		t.Fatal(err)
	}
	r.counters.check(t)
	return r
}

// same wants the same readings and alarms, byte for byte.
func same(t *testing.T, got, want replayed) {
	t.Helper()
	for _, f := range []struct{ name, got, want string }{{"readings", got.readings, want.readings}, {"alarms", got.alarms, want.alarms}} {
		if f.got == f.want {
			continue
		}
		a, b := strings.Split(f.got, "\n"), strings.Split(f.want, "\n")
		for i := range min(len(a), len(b)) {
			if a[i] != b[i] {
				t.Errorf("%s differ in line %d:\n got %s\nwant %s", f.name, i+1, a[i], b[i])
				break
			}
		}
		t.Errorf("%d lines of %s, want %d, and the same", len(a)-1, f.name, len(b)-1)
	}
}
