package oracle_test

import (
	"bytes"
	"context"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"go.uber.org/zap"
	"pgregory.net/rapid"

	. "stillwell/cmd/stillwell/internal/oracle"
	"stillwell/cmd/stillwell/internal/station"
	"stillwell/config"
)

// A ward is a folder in which the daemon runs over a file that is not followed.
type ward struct {
	dir  string
	file *File
}

func (w ward) run() error {
	yaml := w.file.YAML("events.jsonl") + "sinks: {file: {path: readings.jsonl}}\nstate: {dir: state}\n"
	f, err := config.Parse(filepath.Join(w.dir, "study.yaml"), []byte(yaml))
	if err != nil {
		return err
	}
	return station.Run(context.Background(), f, station.RunOptions{Workers: 1, Log: zap.NewNop()})
}

func (w ward) grow(lines []byte) error {
	f, err := os.OpenFile(filepath.Join(w.dir, "events.jsonl"), os.O_APPEND|os.O_CREATE|os.O_WRONLY, 0o644)
	if err != nil {
		return err
	}
	if _, err := f.Write(lines); err != nil {
		return err
	}
	return f.Close()
}

func (w ward) readings() []byte {
	text, err := os.ReadFile(filepath.Join(w.dir, "readings.jsonl"))
	if err != nil {
		return nil
	}
	return text
}

// ends holds the last readings against the oracle's at the end of some lines.
func (w ward) ends(lines []byte) ([]string, error) {
	rec := record{}
	if len(w.readings()) > 0 {
		var err error
		if rec, err = readRecord(filepath.Join(w.dir, "readings.jsonl")); err != nil {
			return nil, err
		}
	}
	var diffs []string
	end := Evaluate(w.file, [][]byte{lines})
	now := map[string]*reading{}
	for key, r := range rec.at(math.MaxInt64) {
		if r.Final && r.Time.UnixNano() == end.Last {
			now[key] = r
		}
	}
	views(sayInto(&diffs), "end ", end, now, end.Last, true)
	return diffs, nil
}

// TestGrowingFile: a file that is read in several runs, having grown in between, ends with the
// numbers of all its lines; a run over an unchanged file writes nothing.
func TestGrowingFile(t *testing.T) {
	often(t, func(t *rapid.T) {
		f := file(t)
		all := bytes.SplitAfter(lines(t, f, 1)[0], []byte("\n"))
		all = all[:len(all)-1]
		dir, err := os.MkdirTemp("", "grow")
		if err != nil {
			t.Fatal(err)
		}
		defer func() { _ = os.RemoveAll(dir) }()
		w := ward{dir, f}
		cuts := append(rapid.SliceOfN(rapid.IntRange(1, len(all)), 0, 2).Draw(t, "cuts"), len(all))
		slices.Sort(cuts)
		from := 0
		for _, to := range cuts {
			if err := w.grow(bytes.Join(all[from:to], nil)); err != nil {
				t.Fatal(err)
			}
			before := w.readings()
			if err := w.run(); err != nil {
				t.Fatalf("%v\n%s", err, trial{f, [][]byte{bytes.Join(all[:to], nil)}})
			}
			if from == to && !bytes.Equal(before, w.readings()) {
				t.Fatalf("nothing has changed, and the run wrote %s", w.readings()[len(before):])
			}
			from = to
			diffs, err := w.ends(bytes.Join(all[:to], nil))
			if err != nil {
				t.Fatal(err)
			}
			if len(diffs) > 0 {
				t.Fatalf("after lines %v: %s\n%s", cuts, strings.Join(diffs, "\n"), trial{f, [][]byte{bytes.Join(all[:to], nil)}})
			}
		}
		before := w.readings()
		if err := w.run(); err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(before, w.readings()) {
			t.Fatalf("a run over an unchanged file wrote %s\n%s", w.readings()[len(before):], trial{f, [][]byte{bytes.Join(all, nil)}})
		}
	})
}

// TestGrowingFerry is the same on the ferry company's recorded site, cut at fixed places.
func TestGrowingFerry(t *testing.T) {
	site := bytes.SplitAfter(ferryParts(t)[0], []byte("\n"))
	w := ward{t.TempDir(), ferryFile()}
	from := 0
	for _, to := range []int{40, 41, 150, len(site)} {
		if err := w.grow(bytes.Join(site[from:to], nil)); err != nil {
			t.Fatal(err)
		}
		from = to
		for again := range 2 {
			before := w.readings()
			if err := w.run(); err != nil {
				t.Fatal(err)
			}
			if again == 1 && !bytes.Equal(before, w.readings()) {
				t.Fatalf("after %d lines: a run over an unchanged file wrote %s", to, w.readings()[len(before):])
			}
			diffs, err := w.ends(bytes.Join(site[:to], nil))
			if err != nil {
				t.Fatal(err)
			}
			for _, d := range diffs {
				t.Errorf("after %d lines: %s", to, d)
			}
		}
	}
}
