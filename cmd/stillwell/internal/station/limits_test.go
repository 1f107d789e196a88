package station

import (
	"bytes"
	"flag"
	"fmt"
	"math/rand/v2"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"stillwell/config"
)

// crampedStudy has room for far fewer units than the ferry's passengers, so that admission is
// halved more than once, rows are dropped, and what they leave is asked for again.
const crampedStudy = `
stream:
  file: {path: events.jsonl}
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
      follow_up: 5h
      by: [platform]
    tallies:
      visits:    {count: 'type == "visit"'}
      fare:      {sum: amount, when: 'type == "ticket"'}
      bought:    {any: 'type == "ticket"'}
      first_fare: {first: amount, when: 'type == "ticket"'}
      past_fare: {sum: amount, when: 'type == "ticket"', before: 9h}
    estimates:
      fare_per_passenger: {of: mean(fare), contrast: relative, adjust: [past_fare]}
      fare_per_visit:     {of: mean(fare) / mean(visits), contrast: difference}
      share_buying:       {of: mean(bought), contrast: difference}
      fare_lately:        {of: mean(fare), contrast: difference, window: 12h}
      first_fare:         {of: mean(first_fare)}
    watches:
      - {on: share_buying, against: '== 0', error: 0.01, tune_for: 20000}
  - name: leaving
    units:
      key: passenger
      conflict: leave
      arm: arm
      arms: {current: 1, wide: 1}
      baseline: current
      entry: type == "assign"
      follow_up: 40m
      again: 50m
      from: 2026-03-01T03:00:00Z
    tallies:
      events: {count: 'true'}
      spent:  {sum: amount, when: 'type == "ticket"'}
      before: {count: 'type == "visit"', before: {span: 3h, grain: 10m}}
    estimates:
      events: {of: mean(events), contrast: difference, adjust: [before]}
      spent:  {of: mean(spent)}
  - name: coming
    units: {key: passenger, follow_up: 1h, again: never}
    tallies:
      visits: {count: 'type == "visit"'}
    estimates:
      visits: {of: mean(visits)}
  - name: growing
    units: {key: passenger}
    tallies:
      visits: {count: 'type == "visit"'}
    estimates:
      visits: {of: mean(visits)}
  - name: payments
    units: {every: 5m}
    tallies:
      slow: {count: 'type == "pay" && ms > 800'}
      pays: {count: 'type == "pay"'}
    estimates:
      share_slow: {of: mean(slow) / mean(pays)}
readings: {every: 10m}
limits: {units: 50, rows: 80}
`

// comers are events of passengers who come and come again for some hours, change arms now and
// then, and are ever new ones.
func comers(seed uint64, n int) [][]byte {
	rng := rand.New(rand.NewPCG(seed, 11))
	parts := make([][]byte, n)
	at := time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC)
	for i := range 3000 {
		at = at.Add(time.Duration(rng.IntN(70_000)) * time.Millisecond)
		who := i/5 + rng.IntN(40) - rng.IntN(1+rng.IntN(200))
		line := fmt.Sprintf(`{"id":"e%d","ts":%q,"passenger":"p%d","platform":%q,`, i,
			at.Add(-time.Duration(rng.IntN(60_000))*time.Millisecond).Format(time.RFC3339Nano), who, []string{"web", "app"}[who&1])
		switch rng.IntN(5) {
		case 0, 1:
			arm := []string{"current", "wide"}[uint(who*7919)/64%2]
			if rng.IntN(15) == 0 {
				arm = "wide"
			}
			line += fmt.Sprintf(`"type":"assign","trial":"seat-map","arm":%q}`, arm)
		case 2, 3:
			line += `"type":"visit"}`
		default:
			line += fmt.Sprintf(`"type":"ticket","amount":%d}`, rng.IntN(300))
		}
		k := rng.IntN(n)
		parts[k] = append(append(parts[k], line...), '\n')
	}
	return parts
}

// fewer makes rapid try less often, unless it was told how often.
func fewer(t *testing.T, checks string) {
	f := flag.Lookup("rapid.checks")
	was := f.Value.String()
	if was == f.DefValue {
		if err := f.Value.Set(checks); err != nil {
			t.Fatal(err)
		}
		t.Cleanup(func() { _ = f.Value.Set(was) })
	}
}

// TestAnyPlanWithinLimits is TestAnyPlan where memory is short: who is admitted, whose row
// goes and what is remembered of it hang on the events alone.
func TestAnyPlanWithinLimits(t *testing.T) {
	fewer(t, "12")
	f, err := config.Parse(filepath.Join(t.TempDir(), "study.yaml"), []byte(crampedStudy))
	if err != nil {
		t.Fatal(err)
	}
	if err := f.Plan.Compile(); err != nil {
		t.Fatal(err)
	}
	rapid.Check(t, func(t *rapid.T) {
		parts := comers(rapid.Uint64Range(1, 50).Draw(t, "seed"), rapid.IntRange(1, 3).Draw(t, "partitions"))
		want := runPlan(t, f, parts, 1, 0)
		got := runPlan(t, f, parts, rapid.IntRange(1, 4).Draw(t, "workers"), rapid.IntRange(0, 4).Draw(t, "crashes"))
		if !bytes.Equal(got.readings, want.readings) {
			t.Fatalf("readings differ: %s", firstDifference(got.readings, want.readings))
		}
		if !bytes.Equal(got.alarms, want.alarms) {
			t.Fatalf("alarms differ: %s", firstDifference(got.alarms, want.alarms))
		}
		if !reflect.DeepEqual(got.counters, want.counters) {
			t.Fatalf("counters: got %+v, want %+v", got.counters, want.counters)
		}
		for _, name := range []string{"seat-map", "leaving", "growing"} {
			if want.counters.Studies[name].Unsampled == 0 {
				t.Fatalf("study %s is too tame for this test: %+v", name, want.counters.Studies[name])
			}
		}
		requireSound(t, want)
		requireSound(t, got)
		if !bytes.Contains(want.readings, []byte(`"sampling":0.25`)) {
			t.Fatal("admission was not halved twice")
		}
	})
}

// TestDroppedRowsChangeNothing: what is read, raised and counted is the same however few rows
// are kept, since marks stand for them, and the sums hold what they held.
func TestDroppedRowsChangeNothing(t *testing.T) {
	fewer(t, "8")
	roomy := strings.Replace(crampedStudy, "limits: {units: 50, rows: 80}", "", 1)
	parse := func(text string) *config.File {
		f, err := config.Parse(filepath.Join(t.TempDir(), "study.yaml"), []byte(text))
		if err != nil {
			t.Fatal(err)
		}
		if err := f.Plan.Compile(); err != nil {
			t.Fatal(err)
		}
		return f
	}
	all, few := parse(roomy), parse(roomy)
	few.Plan.Limits.Rows = 20
	rapid.Check(t, func(t *rapid.T) {
		parts := comers(rapid.Uint64Range(1, 50).Draw(t, "seed"), 1)
		want := runPlan(t, all, parts, 1, 0)
		got := runPlan(t, few, parts, 1, rapid.IntRange(0, 3).Draw(t, "crashes"))
		if !bytes.Equal(got.readings, want.readings) {
			t.Fatalf("readings differ: %s", firstDifference(got.readings, want.readings))
		}
		if !bytes.Equal(got.alarms, want.alarms) {
			t.Fatalf("alarms differ: %s", firstDifference(got.alarms, want.alarms))
		}
		if !reflect.DeepEqual(got.counters, want.counters) {
			t.Fatalf("counters: got %+v, want %+v", got.counters, want.counters)
		}
		requireSound(t, want)
		requireSound(t, got)
		for i, name := range []string{"seat-map", "leaving", "coming"} {
			var kept, open, all int64
			for k := range got.eng.shards {
				u, v := got.eng.shards[k].Kept(i), want.eng.shards[k].Kept(i)
				kept, open, all = kept+u.Rows, open+u.Open, all+v.Rows
			}
			if kept > max(20, open)+20 || all < 2*kept { // a last view drops no rows
				t.Fatalf("study %s: %d rows of %d kept, %d of them open", name, kept, all, open)
			}
		}
	})
}
