package config

import (
	"errors"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
	"time"

	"stillwell/online"
)

const everything = `
stream:
  kafka:
    brokers: [127.0.0.1:9092, kafka-2.harbour.example:9093]
    topics: [harbour.events, harbour.refunds]
    group: ferry
    from: 2026-03-01T00:00:00Z
    tls: {ca_file: ca.pem, cert_file: /etc/ferry.pem, key_file: keys/ferry.key}
    sasl: {mechanism: scram-sha-512, user: ferry, password_env: KAFKA_PASSWORD}
  format: csv
  time: {field: at, unix: ms}
  id: id
  lateness: 1d12h
  remember: 2d
  ahead: 5m
  between: [2026-01-01T00:00:00Z, 2027-01-01T01:00:00+01:00]
  idle: 30s
  silent: 1h
  reject: {path: out/rejected.jsonl}
  max_line: 64KiB
studies:
  - name: seat-map
    about: New seat map against the current one
    units:
      key: passenger.id
      entry: type == "assign"
      arm: arm
      baseline: current
      arms: {current: 2, wide: 1, tall: 0.5}
      conflict: leave
      follow_up: 24h
      from: 2026-03-01T00:00:00Z
      until: 2026-04-01T00:00:00Z
      again: 7d
      by: [platform, country]
    tallies:
      visits: {count: type == "visit"}
      fare: {sum: amount * 2, when: type == "ticket"}
      least: {min: ms}
      most: {max: ms}
      begun: {first: ms}
      ended: {last: ms}
      bought: {any: type == "ticket"}
      past: {sum: amount, before: 14d}
      older: {max: amount, before: {span: 14d, grain: 6h}}
    estimates:
      lift: {of: mean(fare), contrast: relative, adjust: [past, older, age, {field: fare}], tune_for: 2e4}
      pay: {of: mean(most), contrast: difference, among: present}
      slow: {of: mean(most > 800)}
    watches:
      - {on: lift, against: '== 0', error: 0.01}
      - {name: not-slower, on: pay, against: '<= 12.5', error: 0.05, start: 7d, segments: any}
  - name: checkout
    units: {every: 1m}
    tallies: {pays: {count: type == "pay"}}
    estimates: {pays: {of: mean(pays), window: 1h}}
  - name: alone
    units: {events: independent, entry: type == "pay", by: [platform]}
    tallies: {ms: {max: ms}}
    estimates: {ms: {of: mean(ms ?? 0)}}
readings: {every: 1m, level: 0.9}
sinks:
  prometheus: {listen: 0.0.0.0:9464}
  file: {path: out/readings.jsonl, rotate: {size: 1GiB, keep: 3}}
state: {dir: /var/lib/ferry, every: 1m}
limits: {units: 1000, rows: 2e3, segments: 5}
`

func at(text string) int64 {
	t, err := time.Parse(time.RFC3339, text)
	if err != nil {
		panic(err)
	}
	return t.UnixNano()
}

func mustParse(t testing.TB, text string) *File {
	t.Helper()
	f, err := Parse("/srv/ferry/study.yaml", []byte(text))
	if err != nil {
		t.Fatal(err)
	}
	return f
}

func equal[T any](t *testing.T, what string, got, want T) {
	t.Helper()
	if !reflect.DeepEqual(got, want) {
		t.Errorf("%s: got %+v, want %+v", what, got, want)
	}
}

func TestEveryKey(t *testing.T) {
	f := mustParse(t, everything)
	slot := map[string]int{}
	for i, name := range f.Plan.Fields.Names() {
		slot[name] = i
	}
	equal(t, "stream", f.Stream, Stream{
		Kafka: &Kafka{
			Brokers: []string{"127.0.0.1:9092", "kafka-2.harbour.example:9093"}, Topics: []string{"harbour.events", "harbour.refunds"},
			Group: "ferry", Since: at("2026-03-01T00:00:00Z"),
			TLS:  &TLS{"/srv/ferry/ca.pem", "/etc/ferry.pem", "/srv/ferry/keys/ferry.key"},
			SASL: &SASL{"scram-sha-512", "ferry", "KAFKA_PASSWORD"},
		},
		CSV: true, Time: TimeField{Field: "at", Slot: slot["at"], Unit: time.Millisecond}, ID: "id", IDSlot: slot["id"],
		Lateness: 36 * time.Hour, Remember: 48 * time.Hour, Ahead: 5 * time.Minute,
		From: at("2026-01-01T00:00:00Z"), To: at("2027-01-01T00:00:00Z"),
		Idle: 30 * time.Second, Silent: time.Hour, Reject: "/srv/ferry/out/rejected.jsonl", MaxLine: 64 << 10,
	})
	equal(t, "sinks", f.Sinks, Sinks{
		Prometheus: &Prometheus{"0.0.0.0:9464"},
		File:       &FileSink{"/srv/ferry/out/readings.jsonl", "/srv/ferry/out/alarms.jsonl", Rotate{1 << 30, 3}},
	})
	equal(t, "state", f.State, State{"/var/lib/ferry", time.Minute})
	equal(t, "limits", f.Plan.Limits, online.Limits{Units: 1000, Rows: 2000, Segments: 5})
	equal(t, "steps", f.Plan.Every, time.Minute)
	equal(t, "level", f.Plan.Level, 0.9)
	if len(f.Warnings) != 1 || !strings.Contains(f.Warnings[0].Message, "open to whoever reaches") {
		t.Errorf("warnings %v", f.Warnings)
	}

	s := f.Plan.Studies[0]
	equal(t, "study", s.Name+": "+s.About, "seat-map: New seat map against the current one")
	u := s.Units
	if u.Entry == nil {
		t.Error("no entry")
	}
	u.Entry = nil
	equal(t, "units", u, online.Units{
		Kind: online.Keyed, Key: slot["passenger.id"], Arm: slot["arm"], Baseline: "current",
		Arms:  []online.Arm{{Name: "current", Share: 2}, {Name: "wide", Share: 1}, {Name: "tall", Share: 0.5}},
		Leave: true, FollowUp: day, From: at("2026-03-01T00:00:00Z"), Until: at("2026-04-01T00:00:00Z"), Again: 7 * day,
		By: []int{slot["platform"], slot["country"]}, ByNames: []string{"platform", "country"},
	})
	for i, want := range []online.Tally{
		{Name: "visits", Kind: online.Count}, {Name: "fare", Kind: online.SumOf}, {Name: "least", Kind: online.Min},
		{Name: "most", Kind: online.Max}, {Name: "begun", Kind: online.First}, {Name: "ended", Kind: online.Last},
		{Name: "bought", Kind: online.Any}, {Name: "past", Kind: online.SumOf, Before: 14 * day},
		{Name: "older", Kind: online.Max, Before: 14 * day, Grain: 6 * time.Hour},
	} {
		got := s.Tallies[i]
		valued := want.Kind != online.Count && want.Kind != online.Any
		if (got.Value != nil) != valued || (got.When != nil) != (!valued || want.Name == "fare") {
			t.Errorf("tally %s: value %v, when %v", want.Name, got.Value, got.When)
		}
		got.Value, got.When = nil, nil
		equal(t, "tally", got, want)
	}
	lift := s.Estimates[0]
	equal(t, "adjust", lift.Adjust, []online.Covariate{
		{Name: "past", Tally: 7, Field: -1}, {Name: "older", Tally: 8, Field: -1},
		{Name: "age", Tally: -1, Field: slot["age"]}, {Name: "fare", Tally: -1, Field: slot["fare"]}})
	equal(t, "lift", lift.Source+" "+lift.Contrast.String(), "mean(fare) relative")
	equal(t, "tuned", lift.TuneFor, 20000)
	equal(t, "present", s.Estimates[1].Present, true)
	equal(t, "an estimate has its watch's start", s.Estimates[1].Start, 7*day)
	equal(t, "watches", s.Watches, []online.Watch{
		{Name: "lift against == 0", Estimate: 0, Against: online.Equal, Error: 0.01, TuneFor: 20000},
		{Name: "not-slower", Estimate: 1, Against: online.AtMost, Null: 12.5, Error: 0.05, Start: 7 * day, Any: true},
	})

	b := f.Plan.Studies[1]
	equal(t, "buckets", b.Units, online.Units{Kind: online.Buckets, Every: time.Minute, Arm: -1, From: online.NoTime, Until: online.NoTime, Again: defaultAgain})
	equal(t, "window", b.Estimates[0].Window, time.Hour)
	equal(t, "alone", f.Plan.Studies[2].Units.Kind, online.EventsAlone)
}

func TestDefaults(t *testing.T) {
	f := mustParse(t, "stream: {file: {path: events.jsonl}, time: ts}\nstudies:\n- name: s\n  units: {key: k}\n  tallies: {n: {count: 'true'}}\n  estimates: {n: {of: mean(n)}}\n")
	equal(t, "stream", f.Stream, Stream{
		File: &FileSource{Path: "/srv/ferry/events.jsonl"}, Time: TimeField{Field: "ts"}, IDSlot: -1,
		Ahead: time.Hour, From: at("2000-01-01T00:00:00Z"), To: at("2100-01-01T00:00:00Z"), Idle: time.Minute, Silent: 10 * time.Minute, MaxLine: 1 << 20,
	})
	equal(t, "sinks", f.Sinks, Sinks{})
	equal(t, "state", f.State, State{"/srv/ferry/state", 30 * time.Second})
	equal(t, "limits", f.Plan.Limits, online.Limits{Units: 20_000_000, Rows: 5_000_000, Segments: 200})
	equal(t, "steps", f.Plan.Every, 10*time.Second)
	equal(t, "level", f.Plan.Level, 0.95)
	equal(t, "units", f.Plan.Studies[0].Units, online.Units{Key: f.Plan.Studies[0].Units.Key, Arm: -1, From: online.NoTime, Until: online.NoTime, Again: 90 * day})
}

// TestMarkers: the marks of a document's begin and end say nothing.
func TestMarkers(t *testing.T) {
	f := mustParse(t, "# ferry\n---\n"+strings.TrimSpace(everything)+"\n...\n")
	equal(t, "studies", len(f.Plan.Studies), 3)
}

// TestKafkaTime: the message's timestamp needs no field, and ids default to the lateness.
func TestKafkaTime(t *testing.T) {
	f := mustParse(t, "stream: {kafka: {brokers: [localhost:9092], topics: [t], from: latest, sasl: {mechanism: plain, user: u, password_env: P}}, time: {kafka: timestamp}, id: id, lateness: 3m}\n"+
		"studies:\n- name: s\n  units: {key: k}\n  tallies: {n: {count: a}}\n  estimates: {n: {of: mean(n)}}\n")
	equal(t, "time", f.Stream.Time, TimeField{Kafka: true, Slot: -1})
	equal(t, "remember", f.Stream.Remember, 3*time.Minute)
	equal(t, "from", *f.Stream.Kafka, Kafka{Brokers: []string{"localhost:9092"}, Topics: []string{"t"}, Group: "stillwell", Latest: true, Since: online.NoTime, SASL: &SASL{"plain", "u", "P"}})
}

func TestDurations(t *testing.T) {
	for text, want := range map[string]time.Duration{
		"0": 0, "90s": 90 * time.Second, "28d": 28 * day, "1d12h": 36 * time.Hour, "1.5d": 36 * time.Hour, ".5d": 12 * time.Hour,
		"12h1d": 36 * time.Hour, "1h30m": 90 * time.Minute, "-1d": -day, "1d1ms": day + time.Millisecond, "0.1d": 8640 * time.Second,
	} {
		if got, err := ParseDuration(text); err != nil || got != want {
			t.Errorf("%s: %v %v, want %v", text, got, err, want)
		}
	}
	for _, text := range []string{"", "d", "1", "1 d", "1day", "1w", "1d2", "d1", "1e3d", "99999999d", "ten"} {
		if got, err := ParseDuration(text); err == nil {
			t.Errorf("%q: %v, want an error", text, got)
		}
	}
	for _, d := range []time.Duration{0, time.Nanosecond, time.Millisecond, 90 * time.Second, time.Hour, day, 36 * time.Hour, 28 * day, 10 * time.Minute, 2*day + time.Second} {
		if back, err := ParseDuration(FormatDuration(d)); err != nil || back != d {
			t.Errorf("%v is written %q and read %v %v", d, FormatDuration(d), back, err)
		}
	}
	for d, want := range map[time.Duration]string{10 * time.Minute: "10m", day: "24h", 28 * day: "28d", 90 * time.Minute: "1h30m", 90 * time.Second: "1m30s", 0: "0s"} {
		equal(t, "format", FormatDuration(d), want)
	}
}

func TestLoad(t *testing.T) {
	dir := t.TempDir()
	path := filepath.Join(dir, "study.yaml")
	if _, err := Load(path); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("missing file: %v", err)
	}
	if err := os.WriteFile(path, []byte("readings: {evry: 3s}\n"), 0o644); err != nil {
		t.Fatal(err)
	}
	_, err := Load(path)
	var fault *Fault
	if !errors.As(err, &fault) {
		t.Fatalf("no fault in %v", err)
	}
	if !strings.HasPrefix(err.Error(), path+":1:1: ") {
		t.Errorf("error begins %q", err)
	}
	var faults Faults
	if !errors.As(err, &faults) || len(faults) != 3 {
		t.Fatalf("%d faults in %v", len(faults), err)
	}
	last := faults[2]
	equal(t, "the misspelt key", *last, Fault{File: path, Line: 1, Column: 12, Width: 4, Text: "evry", Nearest: "every",
		Message: "readings has no key `evry`", Allowed: []string{"every", "level"}, source: "readings: {evry: 3s}"})
}

// TestHostile: what cannot be read is refused with a place, quickly.
func TestHostile(t *testing.T) {
	for name, tt := range map[string]struct{ text, want string }{
		"not UTF-8":         {"stream: {}\nabout: \"\xff\"\n", "x:2:9: byte 0xff is no valid UTF-8"},
		"control character": {"stream: {}\nab\x00out: 1\n", "x:2:3: control character U+0000"},
		"huge":              {strings.Repeat("# ferry\n", 200_000), "x:1:1: the file has 1600000 bytes"},
		"nested lists":      {strings.Repeat("[", 50_000), "nested more deeply"},
		"nested mappings":   {strings.Repeat("{a: ", 50_000), "nested more deeply"},
		"nested entries":    {strings.Repeat("- ", 50_000) + "a", "nested more deeply"},
		"nested keys":       {strings.Repeat("? ", 50_000) + "a", "nested more deeply"},
		"indented":          {strings.Repeat(" ", 5000) + "a: 1\n", "nested more deeply"},
		"a text alone":      {"ferry", "x:1:1: a study file is a mapping"},
		"a list":            {"- a\n", "x:1:1: a study file is a mapping"},
		"remarks alone":     {"# nothing\n", "x:1:1: the file is empty"},
		"nothing":           {"", "x:1:1: the file is empty"},
	} {
		start := time.Now()
		_, err := Parse("x", []byte(tt.text))
		if err == nil || !strings.Contains(err.Error(), tt.want) {
			t.Errorf("%s: %.200v, want %s", name, err, tt.want)
		}
		if spent := time.Since(start); spent > 5*time.Second {
			t.Errorf("%s took %v", name, spent)
		}
	}
}

// TestSecretsAreNotShown: a password in the file is refused, and no fault repeats it.
func TestSecretsAreNotShown(t *testing.T) {
	for _, text := range []string{
		"stream:\n  kafka:\n    brokerz: [a]\n    sasl: {user: u, password: hunter2}\n",
		"stream:\n  kafka:\n    sasl:\n      password: hunter2\n",
		"stream: {kafka: {sasl: {\"password\": \"hunter2\", mechanism: x}}}\n",
		"stream: {kafka: {sasl: {password: hunter2}\n",
		"stream:\n  kafka:\n    sasl:\n      password: [hunter2]\n",
		"sinks: {webhook: {token: hunter2, url: x}, fil: x}\n",
	} {
		_, err := Parse("x", []byte(text))
		if err == nil || strings.Contains(err.Error(), "hunter2") {
			t.Errorf("%q: %v", text, err)
		}
		var faults Faults
		if errors.As(err, &faults) {
			for _, f := range faults {
				if strings.Contains(f.Text+f.Message, "hunter2") {
					t.Errorf("%q: fault %+v", text, *f)
				}
			}
		}
	}
}
