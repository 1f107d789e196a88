package station

import (
	"bytes"
	"path/filepath"
	"reflect"
	"testing"
	"time"

	"pgregory.net/rapid"

	"stillwell/config"
)

// junk are lines that are no events, and move nothing.
var junk = []string{"hello", "{", "\xff", `{"ts":null}`, `{"ts":"1999-01-01T00:00:00Z"}`, `{"ts":"2026-03-01T00:00:00Z","type":"ticket","amount":"x"}`, "[1]"}

// TestAnyPlanBad: with malformed events anywhere but before the first good one of a partition,
// no plan and no crash changes a byte, and each malformed event is counted once.
func TestAnyPlanBad(t *testing.T) {
	f, err := config.Parse(filepath.Join(t.TempDir(), "study.yaml"), []byte(benchStudy))
	if err != nil {
		t.Fatal(err)
	}
	f.Plan.Every = 10 * time.Minute
	if err := f.Plan.Compile(); err != nil {
		t.Fatal(err)
	}
	checks := 0
	rapid.Check(t, func(t *rapid.T) {
		if checks++; checks > 12 { // each takes a while
			return
		}
		clean := ferryParts(rapid.Uint64Range(1, 50).Draw(t, "seed"), rapid.IntRange(1, 3).Draw(t, "partitions"))
		mixed, bad := make([][]byte, len(clean)), int64(0)
		every := rapid.IntRange(2, 400).Draw(t, "every")
		for i, part := range clean {
			for n, line := range bytes.SplitAfter(part, []byte("\n")) {
				if mixed[i] = append(mixed[i], line...); n%every == every-1 {
					mixed[i] = append(append(mixed[i], junk[n/every%len(junk)]...), '\n')
					bad++
				}
			}
		}
		want := runPlan(t, f, clean, 1, 0)
		got := runPlan(t, f, mixed, rapid.IntRange(1, 4).Draw(t, "workers"), rapid.IntRange(0, 4).Draw(t, "crashes"))
		if !bytes.Equal(got.readings, want.readings) {
			t.Fatalf("readings differ: %s", firstDifference(got.readings, want.readings))
		}
		if !bytes.Equal(got.alarms, want.alarms) {
			t.Fatalf("alarms differ: %s", firstDifference(got.alarms, want.alarms))
		}
		want.counters.Stream.Read += bad
		want.counters.Stream.Malformed += bad
		if !reflect.DeepEqual(got.counters, want.counters) {
			t.Fatalf("%d malformed; counters: got %+v, want %+v", bad, got.counters, want.counters)
		}
	})
}
