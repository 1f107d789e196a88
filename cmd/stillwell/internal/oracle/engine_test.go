package oracle_test

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"maps"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"stillwell/cmd/stillwell/internal/oracle"
	"stillwell/cmd/stillwell/internal/station"
	"stillwell/config"
)

// A reading is a line of readings.jsonl, as far as it is compared.
type reading struct {
	Kind, Study, Estimate, Contrast, Arm, Baseline string
	Segment                                        map[string]string
	Time                                           time.Time
	Value                                          *float64
	StdError                                       *float64 `json:"std_error"`
	Units                                          map[string]int
	Level                                          float64
	Interval                                       *[2]float64
	Provisional                                    *struct {
		Value    *float64
		StdError *float64 `json:"std_error"`
		Units    map[string]int
	}
	Sampling float64
	Heaviest *float64
	Final    bool
}

func (r *reading) key() string {
	seg, _ := json.Marshal(r.Segment)
	return fmt.Sprint(r.Study, " ", r.Estimate, " ", r.Arm, " ", string(seg))
}

// A record is the readings of each estimate, arm and segment, in the order of the file.
type record map[string][]*reading

func readRecord(path string) (record, error) {
	text, err := os.ReadFile(path)
	if err != nil {
		return nil, err
	}
	rec := record{}
	lines := bufio.NewScanner(bytes.NewReader(text))
	lines.Buffer(nil, 1<<20)
	for lines.Scan() {
		r := new(reading)
		if err := json.Unmarshal(lines.Bytes(), r); err != nil {
			return nil, err
		}
		if r.Kind == "reading" {
			rec[r.key()] = append(rec[r.key()], r)
		}
	}
	return rec, lines.Err()
}

// engine replays partitions through the program and gives its counters and readings.
func engine(dir string, f *oracle.File, parts [][]byte, workers int) (station.Counters, record, error) {
	var c station.Counters
	file, err := config.Parse(filepath.Join(dir, "study.yaml"), []byte(f.YAML("events.jsonl")))
	if err != nil {
		return c, nil, err
	}
	var from []string
	for i, p := range parts {
		path := filepath.Join(dir, fmt.Sprintf("part-%d.jsonl", i))
		if err := os.WriteFile(path, p, 0o644); err != nil {
			return c, nil, err
		}
		from = append(from, path)
	}
	done, err := station.Replay(context.Background(), file, station.ReplayOptions{From: from, Out: filepath.Join(dir, "out"), Workers: workers})
	if err != nil {
		return c, nil, err
	}
	text, err := os.ReadFile(filepath.Join(dir, "out", "counters.json"))
	if err != nil {
		return c, nil, err
	}
	if err := json.Unmarshal(text, &c); err != nil {
		return c, nil, err
	}
	if fmt.Sprint(c) != fmt.Sprint(done.Counters) {
		return c, nil, fmt.Errorf("counters.json says %+v, Replay %+v", c, done.Counters)
	}
	rec, err := readRecord(filepath.Join(dir, "out", "readings.jsonl"))
	return c, rec, err
}

// at are the readings that stand at a time: the latest of each.
func (rec record) at(T int64) map[string]*reading {
	m := map[string]*reading{}
	for key, rs := range rec {
		for _, r := range rs {
			if r.Time.UnixNano() <= T {
				m[key] = r
			}
		}
	}
	return m
}

// differences tells where the engine's course and the oracle's are not the same: at the end,
// and before it at each step at which something was emitted.
func differences(h *oracle.History, every time.Duration, c station.Counters, rec record) (diffs []string) {
	say := sayInto(&diffs)
	end := h.At(math.MaxInt64)
	counters(say, end, c)
	views(say, "end ", end, rec.at(math.MaxInt64), end.Last, true)
	steps := map[int64]bool{}
	for _, rs := range rec {
		for _, r := range rs[:len(rs)-1] {
			steps[r.Time.UnixNano()] = true
			if next := r.Time.Truncate(every).Add(every).UnixNano(); next < h.Watermark() {
				steps[next] = true
			}
		}
	}
	// Where there are few, every step between.
	if len(steps) > 0 && h.Watermark()-slices.Min(slices.Collect(maps.Keys(steps))) < 30*int64(every) {
		for T := slices.Min(slices.Collect(maps.Keys(steps))); T < h.Watermark(); T += int64(every) {
			steps[T] = true
		}
	}
	for _, T := range slices.Sorted(maps.Keys(steps)) {
		at := time.Unix(0, T).UTC().Format(time.RFC3339Nano)
		if T%int64(every) != 0 || T >= end.Last {
			say("step %s: a reading between steps", at)
		}
		views(say, "step "+at+" ", h.At(T), rec.at(T), T, false)
	}
	return diffs
}

func sayInto(diffs *[]string) func(string, ...any) {
	return func(format string, args ...any) { *diffs = append(*diffs, fmt.Sprintf(format, args...)) }
}

func counters(say func(string, ...any), want oracle.Result, c station.Counters) {
	asJSON := func(v any) string { b, _ := json.Marshal(v); return strings.ToLower(string(b)) }
	if g, w := asJSON(c.Stream), asJSON(want.Stream); g != w {
		say("stream counters\n   got %s\n  want %s", g, w)
	}
	for name, w := range want.Studies {
		got := c.Studies[name]
		if open["filtered after leaving"] && w.Conflicting > 0 {
			got.Conflicting, got.Filtered = got.Conflicting+got.Filtered, 0
			w.Conflicting, w.Filtered = w.Conflicting+w.Filtered, 0
		}
		if g, w := asJSON(got), asJSON(w); g != w {
			say("counters of %s\n   got %s\n  want %s", name, g, w)
		}
	}
}

// views holds the readings that stand at a step against the oracle's.
func views(say func(string, ...any), when string, want oracle.Result, got map[string]*reading, T int64, final bool) {
	left := map[string]bool{}
	for k := range got {
		left[k] = true
	}
	for _, w := range want.Readings {
		key := fmt.Sprint(w.Study, " ", w.Estimate, " ", w.Arm, " ", w.Segment)
		g := got[key]
		delete(left, key)
		if want.Tied[w.Study] && w.Segment != "{}" {
			continue
		}
		if g == nil {
			if !math.IsNaN(w.Value) || final && !math.IsNaN(w.Provisional.Value) {
				say("%s%s: no reading, want %v over %v, provisional %v over %v", when, key, w.Value, w.Units, w.Provisional.Value, w.Provisional.Units)
			}
			continue
		}
		compare(say, when+key, g, w, g.Time.UnixNano() == T)
		if g.Final != final || final && g.Time.UnixNano() != T {
			say("%s%s: final %v at %v, want %v", when, key, g.Final, g.Time, final)
		}
	}
	for k := range left {
		if want.Tied[got[k].Study] {
			continue
		}
		if got[k].Value != nil || final && got[k].Provisional != nil && got[k].Provisional.Value != nil {
			say("%s%s: a reading that should not be", when, k)
		}
	}
}

// compare holds one reading against the oracle's; a fresh one was written at the very step.
func compare(say func(string, ...any), key string, g *reading, w oracle.Reading, fresh bool) {
	number := func(what string, g *float64, w float64, scale float64) {
		if g == nil {
			if !math.IsNaN(w) && !math.IsInf(w, 0) {
				say("%s: %s is null, want %v", key, what, w)
			}
			return
		}
		if math.IsNaN(w) || math.IsInf(w, 0) || !near(*g, w, scale) {
			say("%s: %s is %v, want %v", key, what, *g, w)
		}
	}
	units := func(what string, g, w map[string]int) {
		if fmt.Sprint(g) != fmt.Sprint(w) {
			say("%s: %s %v, want %v", key, what, g, w)
		}
	}
	number("value", g.Value, w.Value, w.StdError)
	if !w.Series {
		if g.Value != nil {
			number("std_error", g.StdError, w.StdError, w.StdError)
		}
	}
	units("units", g.Units, w.Units)
	if g.Sampling != 1 {
		say("%s: sampling %v", key, g.Sampling)
	}
	switch {
	case !fresh: // a reading is not written for what is provisional
	case g.Provisional != nil:
		number("provisional value", g.Provisional.Value, w.Provisional.Value, w.Provisional.StdError)
		if !w.Series && g.Provisional.Value != nil {
			number("provisional std_error", g.Provisional.StdError, w.Provisional.StdError, w.Provisional.StdError)
		}
		units("provisional units", g.Provisional.Units, w.Provisional.Units)
	case w.Adjusted && open["provisional moved by another arm"]:
	case !near(w.Provisional.Value, w.Value, w.StdError) || !math.IsNaN(w.Value) && fmt.Sprint(w.Provisional.Units) != fmt.Sprint(w.Units):
		say("%s: no provisional, want %v over %v beside %v over %v", key, w.Provisional.Value, w.Provisional.Units, w.Value, w.Units)
	}
	if w.Interval != nil {
		if g.Interval == nil {
			say("%s: interval is null, want %v", key, *w.Interval)
		} else if !near(g.Interval[0], w.Interval[0], w.StdError) || !near(g.Interval[1], w.Interval[1], w.StdError) {
			say("%s: interval is %v, want %v", key, *g.Interval, *w.Interval)
		}
	}
	if w.StdError > 1e-9+1e-6*math.Abs(w.Value) && w.Heaviest > 0 && (g.Heaviest != nil || !w.Endless) {
		number("heaviest", g.Heaviest, w.Heaviest, 1)
	}
}

// near allows 1e-9 of the number, or of what it is measured against where it is nearly nothing.
func near(a, b, scale float64) bool {
	if math.IsNaN(a) || math.IsNaN(b) {
		return math.IsNaN(a) && math.IsNaN(b)
	}
	if math.IsNaN(scale) {
		scale = 0
	}
	return math.Abs(a-b) <= 1e-9*math.Max(math.Max(math.Abs(a), math.Abs(b)), math.Abs(scale))+1e-12
}
