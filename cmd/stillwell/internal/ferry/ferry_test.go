package ferry

import (
	"bufio"
	"os"
	"strconv"
	"testing"
	"time"
)

// TestWrite writes a stream to the file that STILLWELL_FERRY names, for measuring.
func TestWrite(t *testing.T) {
	path := os.Getenv("STILLWELL_FERRY")
	if path == "" {
		path = t.TempDir() + "/events.jsonl"
	}
	n := 1000
	if s := os.Getenv("STILLWELL_FERRY_EVENTS"); s != "" {
		n, _ = strconv.Atoi(s)
	}
	f, err := os.Create(path)
	if err != nil {
		t.Fatal(err)
	}
	w := bufio.NewWriterSize(f, 1<<20)
	site := New(Config{Seed: 1, From: time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC), PerHour: 20000, Effect: 0.05, Disordered: true})
	for range n {
		line, _ := site.Next()
		w.Write(line)
		w.WriteByte('\n')
	}
	if err := w.Flush(); err != nil {
		t.Fatal(err)
	}
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
}
