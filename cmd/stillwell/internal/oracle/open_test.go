package oracle_test

import (
	"testing"
	"time"

	. "stillwell/cmd/stillwell/internal/oracle"
)

// open are the differences between the words and the program that are known and not settled.
// The comparisons leave them out, and TestOpen skips them; a settled one is deleted here, and
// its row there then stands as a test.
var open = map[string]bool{
	"partitions that end in another order":          true, // TestInterleaving
	"a past event whose arm is undeclared":          true,
	"an id that names two events":                   true,
	"entry without an arm at the time of entry":     true,
	"a past that reaches into an earlier follow-up": true,
	"filtered after leaving":                        true,
	"provisional moved by another arm":              true,
	"a lacking field beside another alternative":    true,
	"a sum that is not finite":                      true,
}

// trialed is a study that enters with "assign", in two arms, for an hour.
func trialed() Study {
	entry := Is("type", "assign")
	return Study{Name: "trial", Key: "p", Entry: &entry, Arm: "arm", Baseline: "c", Arms: []string{"c", "w"}, FollowUp: time.Hour,
		Tallies:   []Tally{{Name: "fare", Kind: Sum, Value: Field("v")}},
		Estimates: []Estimate{{Name: "fare", Of: Mean(T("fare"))}}}
}

func TestOpen(t *testing.T) {
	relative := []Estimate{{Name: "lift", Of: Mean(T("fare")), Contrast: "relative"}}
	for _, tt := range []struct {
		name  string
		study func(s *Study)
		lines string
	}{
		{"malformed first line", nil, `17
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"c","v":1}
{"ts":"2026-03-01T03:15:00Z","type":"assign","p":"2","arm":"c","v":9}
{"ts":"2026-03-01T09:00:00Z"}
`},
		{"entry without an arm at the time of entry", nil, `{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","v":5}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"c","v":1}
{"ts":"2026-03-01T09:00:00Z"}
`},
		{"a past that reaches into an earlier follow-up", func(s *Study) {
			s.Again = 10 * time.Minute
			s.Tallies[0].Before = 3 * time.Hour
		}, `{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"c","v":5}
{"ts":"2026-03-01T02:00:00Z","type":"assign","p":"1","arm":"c"}
{"ts":"2026-03-01T09:00:00Z"}
`},
		{"filtered after leaving", func(s *Study) { s.Leave = true }, `{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"c"}
{"ts":"2026-03-01T00:01:00Z","type":"assign","p":"1","arm":"w"}
{"ts":"2026-03-01T00:02:00Z","type":"visit","p":"1"}
`},
		{"error of one unit", func(s *Study) { s.Estimates = relative }, `{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"c","v":5}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"2","arm":"w"}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"3","arm":"w"}
{"ts":"2026-03-01T09:00:00Z"}
`},
		{"rounding of the error", func(s *Study) { s.Tallies[0].Kind = Last }, `{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"c","v":1700000001}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"2","arm":"c","v":1700000002}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"3","arm":"c","v":1700000004}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"4","arm":"c"}
{"ts":"2026-03-01T09:00:00Z"}
`},
		{"provisional moved by another arm", func(s *Study) {
			s.Arms = append(s.Arms, "x")
			s.Tallies = append(s.Tallies, Tally{Name: "past", Kind: Sum, Value: Field("v"), Before: time.Hour})
			s.Estimates = []Estimate{{Name: "lift", Of: Mean(T("fare")), Contrast: "difference", Adjust: []Covariate{{Field: "age"}}}}
		}, `{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"c","v":5,"age":30}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"2","arm":"c","v":9,"age":40}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"3","arm":"c","v":8,"age":50}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"4","arm":"w","v":15,"age":35}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"5","arm":"w","v":19,"age":45}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"6","arm":"w","v":12,"age":56}
{"ts":"2026-03-01T02:00:00Z","type":"assign","p":"7","arm":"x","v":8,"age":99}
{"ts":"2026-03-01T02:30:00Z"}
`},
		{"baseline that nobody has seen", func(s *Study) {
			s.Arms = nil
			s.Estimates = []Estimate{{Name: "gain", Of: Mean(T("fare")), Contrast: "difference"}}
		}, `{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"tall","v":5}
{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"2","arm":"w","v":9}
{"ts":"2026-03-01T09:00:00Z"}
`},
		{"an event of an endless study on a step", func(s *Study) { s.FollowUp = 0 }, `{"ts":"2026-03-01T00:05:00Z","type":"assign","p":"1","arm":"c","v":5}
{"ts":"2026-03-01T02:00:00Z","type":"assign","p":"2","arm":"c","v":9}
{"ts":"2026-03-01T09:00:00Z"}
`},
		{"buckets that begin before the stream", func(s *Study) {
			*s = Study{Name: "quarters", Bucket: 15 * time.Minute, From: time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC), Tallies: s.Tallies, Estimates: s.Estimates}
		}, `{"ts":"2026-03-01T01:25:00Z","v":5}
{"ts":"2026-03-01T01:50:00Z","v":7}
`},
		{"a bool is no number", nil, `{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"c","v":true}
`},
		{"a lacking field beside another alternative", func(s *Study) {
			either := Or(Is("type", "assign"), Above("ms", 800))
			s.Tallies = []Tally{{Name: "fare", Kind: Count, When: &either}}
		}, `{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"c"}
{"ts":"2026-03-01T09:00:00Z"}
`},
		{"a sum that is not finite", nil, `{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"c","v":1e308}
{"ts":"2026-03-01T00:10:00Z","p":"1","v":1e308}
{"ts":"2026-03-01T00:10:00Z","type":"assign","p":"2","arm":"c","v":5}
{"ts":"2026-03-01T09:00:00Z"}
`},
		{"a past event whose arm is undeclared", func(s *Study) { s.Tallies[0].Before = time.Hour }, `{"ts":"2026-03-01T00:00:00Z","type":"assign","p":"1","arm":"x","v":5}
{"ts":"2026-03-01T00:10:00Z","type":"assign","p":"1","arm":"c"}
{"ts":"2026-03-01T09:00:00Z"}
`},
		{"a segment that everyone has left", func(s *Study) { s.FollowUp, s.Leave, s.By = 0, true, []string{"platform"} }, `{"ts":"2026-03-01T00:10:00Z","type":"assign","p":"1","arm":"c","platform":"web","v":5}
{"ts":"2026-03-01T02:10:00Z","type":"assign","p":"1","arm":"w","platform":"web"}
{"ts":"2026-03-01T09:00:00Z"}
`},
		{"an id that names two events", nil, `{"ts":"2026-03-01T00:00:00Z","id":"a","type":"assign","p":"1","arm":"c","v":1}
{"ts":"2026-03-01T00:10:00Z","id":"b"}
{"ts":"2026-03-01T00:05:00Z","id":"a","p":"1","v":9}
`},
	} {
		t.Run(tt.name, func(t *testing.T) {
			s := trialed()
			if tt.study != nil {
				tt.study(&s)
			}
			was := open[tt.name]
			delete(open, tt.name)
			defer func() { open[tt.name] = was }()
			f := &File{Stream: Stream{Time: "ts", ID: "id", Lateness: 5 * time.Minute}, Every: time.Hour, Level: 0.95, Studies: []Study{s}}
			diffs, err := faults(trial{f, [][]byte{[]byte(tt.lines)}}, 1)
			if err != nil {
				t.Fatal(err)
			}
			for _, d := range diffs {
				if was {
					t.Skip(d)
				}
				t.Error(d)
			}
			if was {
				t.Log("settled: take it off the list")
			}
		})
	}
}
