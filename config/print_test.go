package config

import (
	"slices"
	"strings"
	"testing"
)

// changed replaces one piece of the file with everything in it.
func changed(t *testing.T, old, now string) *File {
	t.Helper()
	if strings.Count(everything, old) != 1 {
		t.Fatalf("%q stands %d times in the file", old, strings.Count(everything, old))
	}
	return mustParse(t, strings.Replace(everything, old, now, 1))
}

// TestPrintsOfTheSame: what decides no number leaves every fingerprint alone.
func TestPrintsOfTheSame(t *testing.T) {
	base := mustParse(t, everything)
	for _, tt := range [][2]string{
		{"studies:", "# a remark\nstudies:"},
		{"New seat map", "Newest seat map"},
		{"group: ferry", "group: stillwell"},
		{"from: 2026-03-01T00:00:00Z\n    tls", "from: latest\n    tls"},
		{"kafka-2.harbour.example:9093", "kafka-3.harbour.example:9093"},
		{"password_env: KAFKA_PASSWORD", "password_env: OTHER"},
		{"idle: 30s", "idle: 40s"}, {"silent: 1h", "silent: 2h"},
		{"out/rejected", "out/refused"},
		{"lateness: 1d12h", "lateness: 36h"},
		{"2027-01-01T01:00:00+01:00", "2027-01-01T00:00:00Z"},
		{"amount * 2, when: type == \"ticket\"}", "'amount  *  2', when: 'type   == \"ticket\"'}"},
		{"{of: mean(fare), contrast: relative, ", "{contrast: relative, of: \"mean( (fare) )\", "},
		{"tune_for: 2e4", "tune_for: 20000"},
		{"against: '== 0'", "against: '==0.0'"},
		{"listen: 0.0.0.0:9464", "listen: 127.0.0.1:9464"},
		{"path: out/readings.jsonl", "path: elsewhere.jsonl"},
		{"dir: /var/lib/ferry", "dir: state"},
	} {
		f := changed(t, tt[0], tt[1])
		if f.StreamPrint.Hash != base.StreamPrint.Hash {
			t.Errorf("%q: the stream changed: %v", tt[1], f.StreamPrint.Changes(base.StreamPrint.Lines))
		}
		for i, p := range f.StudyPrints {
			if p.Hash != base.StudyPrints[i].Hash {
				t.Errorf("%q: study %d changed: %v", tt[1], i, p.Changes(base.StudyPrints[i].Lines))
			}
		}
	}
}

// TestPrintsOfAnother: what decides numbers changes the fingerprint of what it decides,
// and of nothing else, and is told.
func TestPrintsOfAnother(t *testing.T) {
	base := mustParse(t, everything)
	const stream, seatMap, checkout, alone = -1, 0, 1, 2
	for _, tt := range []struct {
		old, now string
		who      []int
		told     string
	}{
		{"format: csv", "format: json", []int{stream}, "format was csv and is json"},
		{"unix: ms", "unix: us", []int{stream}, "time was at, in units of 1ms since 1970 and is at, in units of 1µs since 1970"},
		{"harbour.refunds]", "harbour.orders]", []int{stream}, "kafka.topics was harbour.events, harbour.refunds and is harbour.events, harbour.orders"},
		{"  id: id\n", "  id: uid\n", []int{stream}, "id was id and is uid"},
		{"remember: 2d", "remember: 3d", []int{stream}, "remember was 2d and is 3d"},
		{"ahead: 5m", "ahead: 6m", []int{stream}, "ahead was 5m and is 6m"},
		{"lateness: 1d12h", "lateness: 1d", []int{stream}, "lateness was 36h and is 24h"},
		{"max_line: 64KiB", "max_line: 64B", []int{stream}, "max_line was 65536 and is 64"},
		{"[2026-01-01T00:00:00Z,", "[2026-01-02T00:00:00Z,", []int{stream}, "between.from was 2026-01-01T00:00:00Z and is 2026-01-02T00:00:00Z"},
		{"name: seat-map", "name: seats", []int{seatMap}, "name was seat-map and is seats"},
		{"passenger.id", "passenger.uid", []int{seatMap}, "units.key was passenger.id and is passenger.uid"},
		{`entry: type == "assign"`, `entry: type == "as  sign"`, []int{seatMap}, `units.entry was type == "assign" and is type == "as  sign"`},
		{"wide: 1,", "wide: 3,", []int{seatMap}, "units.arms.wide was 1 and is 3"},
		{", tall: 0.5}", "}", []int{seatMap}, "units.arms.tall is gone; it was 0.5"},
		{"conflict: leave", "conflict: first", []int{seatMap}, "units.conflict was leave and is first"},
		{"follow_up: 24h", "follow_up: 25h", []int{seatMap}, "units.follow_up was 24h and is 25h"},
		{"again: 7d", "again: never", []int{seatMap}, "units.again was 7d and is never"},
		{"[platform, country]", "[platform]", []int{seatMap}, "units.by was platform, country and is platform"},
		{"until: 2026-04-01T00:00:00Z\n", "\n", []int{seatMap}, "units.until is gone; it was 2026-04-01T00:00:00Z"},
		{"amount * 2", "amount * 3", []int{seatMap}, "tallies.fare.sum was amount * 2 and is amount * 3"},
		{"bought: {any:", "bought: {count:", []int{seatMap}, `tallies.bought.count is new: type == "ticket"`},
		{"grain: 6h", "grain: 7h", []int{seatMap}, "tallies.older.grain was 6h and is 7h"},
		{"past: {sum: amount, before: 14d}", "past: {sum: amount, before: 15d}", []int{seatMap}, "tallies.past.before was 14d and is 15d"},
		{"mean(most > 800)", "mean(most > 900)", []int{seatMap}, "estimates.slow.of was mean(most > 800) and is mean(most > 900)"},
		{"age, {field: fare}]", "age]", []int{seatMap}, "estimates.lift.adjust was past, older, field age, field fare and is past, older, field age"},
		{"contrast: relative", "contrast: difference", []int{seatMap}, "estimates.lift.contrast was relative and is difference"},
		{"tune_for: 2e4", "tune_for: 2e5", []int{seatMap}, "watches.lift against == 0.tune_for was 20000 and is 200000"},
		{"error: 0.01", "error: 0.02", []int{seatMap}, "watches.lift against == 0.error was 0.01 and is 0.02"},
		{"start: 7d, ", "", []int{seatMap}, "watches.not-slower.start is gone; it was 7d"},
		{"window: 1h", "window: 2h", []int{checkout}, "estimates.pays.window was 1h and is 2h"},
		{"units: {every: 1m}", "units: {every: 2m}", []int{checkout}, "units.every was 1m and is 2m"},
		{"mean(ms ?? 0)", "mean(ms ?? 1)", []int{alone}, "estimates.ms.of was mean(ms ?? 0) and is mean(ms ?? 1)"},
		{"readings: {every: 1m,", "readings: {every: 2m,", []int{seatMap, checkout, alone}, "readings.every was 1m and is 2m"},
		{"level: 0.9}", "level: 0.8}", []int{seatMap, checkout, alone}, "readings.level was 0.9 and is 0.8"},
		{"segments: 5}", "segments: 6}", []int{seatMap, checkout, alone}, "limits.segments was 5 and is 6"},
		{"units: 1000,", "units: 1001,", []int{seatMap, checkout, alone}, "limits.units was 1000 and is 1001"},
	} {
		f := changed(t, tt.old, tt.now)
		for i := stream; i < len(f.StudyPrints); i++ {
			now, was := f.StreamPrint, base.StreamPrint
			if i != stream {
				now, was = f.StudyPrints[i], base.StudyPrints[i]
			}
			if hit := slices.Contains(tt.who, i); hit == (now.Hash == was.Hash) {
				t.Errorf("%q: fingerprint %d, changed: %v", tt.now, i, !hit)
			} else if told := now.Changes(was.Lines); hit && !slices.Contains(told, tt.told) {
				t.Errorf("%q: told %q, want %q", tt.now, told, tt.told)
			}
		}
	}
}

// TestFilePrint: a file is known by its path as written, so that a folder can move.
func TestFilePrint(t *testing.T) {
	const rest = ", time: ts}\nstudies:\n- name: s\n  units: {key: k}\n  tallies: {n: {count: a}}\n  estimates: {n: {of: mean(n)}}\n"
	a, err := Parse("/srv/a/study.yaml", []byte("stream: {file: {path: ./events.jsonl}"+rest))
	if err != nil {
		t.Fatal(err)
	}
	b, err := Parse("b/study.yaml", []byte("stream: {file: {path: events.jsonl, follow: true}"+rest))
	if err != nil {
		t.Fatal(err)
	}
	c, err := Parse("b/study.yaml", []byte("stream: {file: {path: other.jsonl}"+rest))
	if err != nil {
		t.Fatal(err)
	}
	equal(t, "moved", b.StreamPrint, a.StreamPrint)
	equal(t, "another file", c.StreamPrint.Changes(a.StreamPrint.Lines), []string{"file.path was events.jsonl and is other.jsonl"})
}

func TestCanonical(t *testing.T) {
	for text, want := range map[string]string{
		"  a  ==\n\t1 ":          "a == 1",
		`a == "x  y"  &&  b`:     `a == "x  y" && b`,
		`a == 'x  "  y'  ||  b`:  `a == 'x  "  y' || b`,
		`a == "x \"  y"  &&   b`: `a == "x \"  y" && b`,
	} {
		equal(t, "canonical", canonical(text), want)
	}
}
