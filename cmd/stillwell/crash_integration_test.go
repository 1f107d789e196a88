//go:build integration

package main

import (
	"bytes"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"testing"
	"time"

	"stillwell/cmd/stillwell/internal/ferry"
)

// binary builds the program once a test run.
func binary(t *testing.T) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "stillwell")
	out, err := exec.Command("go", "build", "-o", path, ".").CombinedOutput()
	if err != nil {
		t.Fatalf("go build: %v\n%s", err, out)
	}
	return path
}

// ferryLines is a recorded stream of the ferry company's site.
func ferryLines(n int) []byte {
	site := ferry.New(ferry.Config{Seed: 3, From: time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC), PerHour: 4000, Effect: 0.1, Disordered: true})
	var b []byte
	for range n {
		line, _ := site.Next()
		b = append(append(b, line...), '\n')
	}
	return b
}

// study is the demo's study file on another stream, with its outputs in dir.
func study(t *testing.T, dir, stream string) string {
	t.Helper()
	file := bytes.Replace(ferry.Study, []byte(`  file: {path: "-"}            # the demo puts its own stream in this place`), []byte(stream), 1)
	if bytes.Equal(file, ferry.Study) {
		t.Fatal("the demo's study file has no stream to replace")
	}
	file = append(file, "sinks: {file: {path: readings.jsonl}}\nstate: {dir: state, every: 100ms}\n"...)
	path := filepath.Join(dir, "study.yaml")
	write(t, path, file)
	return path
}

func write(t *testing.T, path string, b []byte) {
	t.Helper()
	if err := os.WriteFile(path, b, 0o644); err != nil {
		t.Fatal(err)
	}
}

// TestKilled kills the daemon with SIGKILL a hundred times while it reads a file, and
// compares what it leaves with an undisturbed run.
func TestKilled(t *testing.T) {
	bin, root := binary(t), t.TempDir()
	events := filepath.Join(root, "events.jsonl")
	write(t, events, ferryLines(1_200_000))
	stream := fmt.Sprintf("  file: {path: %s}", events)

	calm := filepath.Join(root, "calm")
	mkdir(t, calm)
	start := time.Now()
	if out, err := exec.Command(bin, "run", study(t, calm, stream)).CombinedOutput(); err != nil {
		t.Fatalf("undisturbed: %v\n%s", err, out)
	}
	took := time.Since(start)

	killed := filepath.Join(root, "killed")
	mkdir(t, killed)
	file := study(t, killed, stream)
	rng := rand.New(rand.NewPCG(11, 0))
	kills := 0
	for {
		cmd := exec.Command(bin, "run", file)
		var log bytes.Buffer
		cmd.Stderr = &log
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		done := make(chan error, 1)
		go func() { done <- cmd.Wait() }()
		life := time.Duration(rng.Int64N(int64(took / 8)))
		if kills >= 100 {
			life = time.Hour
		}
		select {
		case err := <-done:
			if err != nil {
				t.Fatalf("after %d kills: %v\n%s", kills, err, log.String())
			}
			if kills < 100 {
				t.Logf("finished after %d kills; again from the start of the last part", kills)
			}
			compareFiles(t, calm, killed)
			t.Logf("%d kills", kills)
			return
		case <-time.After(life):
			if err := cmd.Process.Kill(); err != nil && !errors.Is(err, os.ErrProcessDone) {
				t.Fatal(err)
			}
			<-done
			kills++
		}
	}
}

func mkdir(t *testing.T, dir string) {
	t.Helper()
	if err := os.Mkdir(dir, 0o755); err != nil {
		t.Fatal(err)
	}
}

func compareFiles(t *testing.T, want, got string) {
	t.Helper()
	for _, name := range []string{"readings.jsonl", "alarms.jsonl"} {
		a, err := os.ReadFile(filepath.Join(want, name))
		if err != nil {
			t.Fatal(err)
		}
		b, err := os.ReadFile(filepath.Join(got, name))
		if err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(a, b) {
			t.Errorf("%s: %d bytes, want %d, and the same", name, len(b), len(a))
		}
		if name == "readings.jsonl" && len(a) == 0 {
			t.Error("no readings at all")
		}
	}
}

func read(t *testing.T, path string) []byte {
	t.Helper()
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func replace(t *testing.T, path, old, new string) {
	t.Helper()
	b := read(t, path)
	if !bytes.Contains(b, []byte(old)) {
		t.Fatalf("%s has no %q", path, old)
	}
	write(t, path, bytes.Replace(b, []byte(old), []byte(new), 1))
}
