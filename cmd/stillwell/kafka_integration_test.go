//go:build integration

package main

import (
	"bytes"
	"context"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"sync"
	"syscall"
	"testing"
	"time"

	"stillwell/stream/kafka/kafkatest"
)

const harbour = "harbour.events"

// spread cuts a recorded stream into partitions by line.
func spread(b []byte, n int) [][][]byte {
	parts := make([][][]byte, n)
	for i, line := range bytes.Split(bytes.TrimSuffix(b, []byte("\n")), []byte("\n")) {
		parts[i*31/7%n] = append(parts[i*31/7%n], line)
	}
	return parts
}

// TestKafkaKilled reads a topic of four partitions from a real broker: once in peace, and
// once while it is still being filled, with the daemon killed a hundred times and the broker
// twice. Readings and alarms must be the same, byte for byte.
func TestKafkaKilled(t *testing.T) {
	bin, root := binary(t), t.TempDir()
	broker := kafkatest.Start(t, kafkatest.Options{})
	parts := spread(ferryLines(600_000), 4)
	for _, topic := range []string{harbour, harbour + ".calm"} {
		broker.CreateTopic(topic, len(parts), nil)
	}
	stream := func(topic, group string) string {
		return fmt.Sprintf("  kafka: {brokers: [%s], topics: [%s], group: %s}", broker.Addr, topic, group)
	}
	for p, lines := range parts {
		broker.Produce(harbour+".calm", int32(p), lines)
	}

	calm := filepath.Join(root, "calm")
	mkdir(t, calm)
	d := start(t, bin, study(t, calm, stream(harbour+".calm", "calm")))
	size := settled(t, filepath.Join(calm, "readings.jsonl"))
	d.terminate(t)
	if got := broker.Committed("calm"); len(got) != len(parts) {
		t.Errorf("offsets committed to the group: %v, want one of each partition", got)
	}

	killed := filepath.Join(root, "killed")
	mkdir(t, killed)
	file := study(t, killed, stream(harbour, "killed"))
	var filling sync.WaitGroup
	filling.Go(func() {
		const rounds = 60
		for r := range rounds {
			for p, lines := range parts {
				broker.Produce(harbour, int32(p), lines[len(lines)*r/rounds:len(lines)*(r+1)/rounds])
			}
			time.Sleep(300 * time.Millisecond)
		}
	})
	rng := rand.New(rand.NewPCG(13, 0))
	for kill := range 100 {
		d := start(t, bin, file)
		time.Sleep(time.Duration(100+rng.IntN(400)) * time.Millisecond)
		d.kill(t)
		if kill == 40 || kill == 70 {
			broker.Kill()
			broker.Restart()
		}
	}
	filling.Wait()
	d = start(t, bin, file)
	readings := filepath.Join(killed, "readings.jsonl")
	for deadline := time.Now().Add(2 * time.Minute); time.Now().Before(deadline); time.Sleep(200 * time.Millisecond) {
		if info, err := os.Stat(readings); err == nil && info.Size() >= size {
			break
		}
	}
	settled(t, readings)
	d.terminate(t)
	compareFiles(t, calm, killed)
}

// daemon is a running stillwell.
type daemon struct {
	cmd *exec.Cmd
	log bytes.Buffer
}

func start(t *testing.T, bin, file string) *daemon {
	t.Helper()
	d := &daemon{cmd: exec.Command(bin, "run", file)}
	d.cmd.Stderr = &d.log
	if err := d.cmd.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = d.cmd.Process.Kill() })
	return d
}

func (d *daemon) kill(t *testing.T) {
	t.Helper()
	if err := d.cmd.Process.Kill(); err != nil {
		t.Fatalf("%v\n%s", err, d.log.String())
	}
	_ = d.cmd.Wait()
}

// terminate stops the daemon as an operator would; it must exit 0 within a few seconds.
func (d *daemon) terminate(t *testing.T) {
	t.Helper()
	if err := d.cmd.Process.Signal(syscall.SIGTERM); err != nil {
		t.Fatalf("%v\n%s", err, d.log.String())
	}
	ctx, cancel := context.WithTimeout(context.Background(), 20*time.Second)
	defer cancel()
	done := make(chan error, 1)
	go func() { done <- d.cmd.Wait() }()
	select {
	case err := <-done:
		if err != nil {
			t.Fatalf("after SIGTERM: %v\n%s", err, d.log.String())
		}
	case <-ctx.Done():
		t.Fatalf("still running 20s after SIGTERM\n%s", d.log.String())
	}
}

// settled waits until a file has stopped growing, and tells its size.
func settled(t *testing.T, path string) int64 {
	t.Helper()
	var size int64
	since := time.Now()
	for deadline := time.Now().Add(2 * time.Minute); time.Now().Before(deadline); time.Sleep(100 * time.Millisecond) {
		info, err := os.Stat(path)
		if err != nil {
			continue
		}
		if info.Size() != size {
			size, since = info.Size(), time.Now()
		}
		if size > 0 && time.Since(since) > 4*time.Second {
			return size
		}
	}
	t.Fatalf("%s has not settled", path)
	return 0
}
