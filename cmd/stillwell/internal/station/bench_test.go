package station

import (
	"bufio"
	"os"
	"testing"
	"time"

	"stillwell/cmd/stillwell/internal/ferry"
	"stillwell/config"
)

// BenchmarkReplay replays recorded events end to end beside merely splitting the same file
// into lines; "of-split" is the ratio of the two speeds in this run.
//
//	go test ./cmd/stillwell/internal/station -run '^$' -bench Replay -benchtime 3x
func BenchmarkReplay(b *testing.B) {
	dir := b.TempDir()
	path := dir + "/events.jsonl"
	size := writeFerry(b, path, 1_000_000)
	f, err := config.Parse(dir+"/study.yaml", []byte(benchStudy))
	if err != nil {
		b.Fatal(err)
	}
	b.SetBytes(size)
	var split, replay time.Duration
	for b.Loop() {
		start := time.Now()
		in, err := os.Open(path)
		if err != nil {
			b.Fatal(err)
		}
		for s := bufio.NewScanner(in); s.Scan(); {
		}
		in.Close()
		split += time.Since(start)
		start = time.Now()
		if _, err := Replay(b.Context(), f, ReplayOptions{From: []string{path}, Out: dir + "/out"}); err != nil {
			b.Fatal(err)
		}
		replay += time.Since(start)
	}
	b.ReportMetric(split.Seconds()/replay.Seconds(), "of-split")
}

func writeFerry(tb testing.TB, path string, n int) int64 {
	tb.Helper()
	out, err := os.Create(path)
	if err != nil {
		tb.Fatal(err)
	}
	w := bufio.NewWriterSize(out, 1<<20)
	site := ferry.New(ferry.Config{Seed: 1, From: time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC), PerHour: 400, Effect: 0.09, Disordered: true})
	for range n {
		line, _ := site.Next()
		w.Write(line)
		w.WriteByte('\n')
	}
	if err := w.Flush(); err != nil {
		tb.Fatal(err)
	}
	info, err := out.Stat()
	if err != nil {
		tb.Fatal(err)
	}
	if err := out.Close(); err != nil {
		tb.Fatal(err)
	}
	return info.Size()
}

const benchStudy = `
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
      follow_up: 24h
      by: [platform]
    tallies:
      visits:    {count: 'type == "visit"'}
      fare:      {sum: amount, when: 'type == "ticket"'}
      bought:    {any: 'type == "ticket"'}
      past_fare: {sum: amount, when: 'type == "ticket"', before: 48h}
    estimates:
      fare_per_passenger: {of: mean(fare), contrast: relative, adjust: [past_fare]}
      fare_per_visit:     {of: mean(fare) / mean(visits), contrast: difference}
      share_buying:       {of: mean(bought), contrast: difference}
    watches:
      - {on: fare_per_passenger, against: '== 0', error: 0.01, tune_for: 20000}
  - name: payments
    units: {every: 5m}
    tallies:
      slow: {count: 'type == "pay" && ms > 800'}
      pays: {count: 'type == "pay"'}
    estimates:
      share_slow: {of: mean(slow) / mean(pays)}
readings: {every: 1h}
`
