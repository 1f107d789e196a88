package main

import (
	"path/filepath"
	"strings"
	"testing"
)

// TestEdited: a study that was edited is refused with what has changed, unless it begins anew;
// other changes are none.
func TestEdited(t *testing.T) {
	lines := tickets(24, 2000)
	dir := site(t, joined(lines[:1000]))
	study := text(t, filepath.Join(dir, "study.yaml"))
	edit := func(old, new string) string {
		t.Helper()
		if !strings.Contains(study, old) {
			t.Fatalf("no %q in the study file", old)
		}
		return strings.Replace(study, old, new, 1)
	}
	invoke(t, dir, exitDone, "run", "study.yaml")
	before := listing(t, dir)
	for _, tt := range []struct {
		old, new string
		parts    []string
	}{
		{"follow_up: 6h", "follow_up: 7h", []string{"study seat-map", "units.follow_up was 6h and is 7h", "--fresh seat-map"}},
		{"when: 'type == \"ticket\"'}\n      dearest", "when: 'type == \"ticket\" && amount > 1'}\n      dearest", []string{"study seat-map", "tallies.fare.when", "amount > 1"}},
		{"error: 0.05", "error: 0.01", []string{"study seat-map", "error was 0.05 and is 0.01"}},
		{"every: 5m", "every: 6m", []string{"study payments", "units.every was 5m and is 6m", "--fresh payments"}},
		{"ms > 300", "ms > 400", []string{"study payments", "300", "400"}},
		{"lateness: 2m", "lateness: 3m", []string{"the stream", "lateness was 2m and is 3m", "state.dir"}},
		{"  id: id\n", "", []string{"the stream", "id is gone"}},
	} {
		put(t, filepath.Join(dir, "study.yaml"), edit(tt.old, tt.new))
		_, stderr := invoke(t, dir, exitWrong, "run", "study.yaml")
		mentions(t, stderr, tt.parts...)
	}
	put(t, filepath.Join(dir, "study.yaml"), study)
	for name, b := range listing(t, dir) {
		if b != before[name] {
			t.Errorf("a run that was refused has changed %s", name)
		}
	}

	// Remarks, layout, names of sinks and times of saving decide no number.
	other := strings.Replace(edit("units:\n      key: passenger", "about: said otherwise   # and a remark\n    units:\n      key:   'passenger'"), "path: readings.jsonl", "path: other.jsonl, alarms: alarms.jsonl", 1)
	put(t, filepath.Join(dir, "study.yaml"), "# a remark\n\n"+other+"state: {every: 1s}\n")
	put(t, filepath.Join(dir, "events.jsonl"), joined(lines[:1500]))
	invoke(t, dir, exitDone, "run", "study.yaml")

	// A new study begins where the stream is; the others go on.
	added := strings.Replace(study, "readings: {every: 10m}", "  - name: visits\n    units: {every: 10m}\n    tallies: {visits: {count: 'type == \"visit\"'}}\n    estimates: {visits: {of: mean(visits)}}\nreadings: {every: 10m}", 1)
	put(t, filepath.Join(dir, "study.yaml"), added)
	put(t, filepath.Join(dir, "events.jsonl"), joined(lines))
	invoke(t, dir, exitDone, "run", "study.yaml")
	whole := replay(t, dir, "study.yaml", "events.jsonl")
	last := func(r, study string) string {
		var out []string
		for _, line := range strings.Split(r, "\n") {
			if strings.Contains(line, `"final":true`) && strings.Contains(line, `"study":"`+study+`"`) {
				out = append(out, line)
			}
		}
		return strings.Join(out, "\n")
	}
	end := written(t, dir).readings
	for _, name := range []string{"seat-map", "payments"} {
		if got, want := last(end, name), last(whole.readings, name); got != want || want == "" {
			t.Errorf("%s after a study was added:\n got %s\nwant %s", name, got, want)
		}
	}
	if got, all := last(end, "visits"), last(whole.readings, "visits"); got == "" || got == all {
		t.Errorf("the new study saw what came before it:\n%s", got)
	}

	// One begins anew, the other does not notice.
	put(t, filepath.Join(dir, "study.yaml"), strings.Replace(added, "ms > 300", "ms > 400", 1))
	invoke(t, dir, exitDone, "run", "study.yaml", "--fresh", "payments")
	invoke(t, dir, exitDone, "run", "study.yaml")
	if got, want := last(written(t, dir).readings, "seat-map"), last(whole.readings, "seat-map"); got != want {
		t.Errorf("seat-map after payments began anew:\n got %s\nwant %s", got, want)
	}
	stdout, _ := invoke(t, dir, exitDone, "show", "state")
	if !strings.Contains(stdout, "study payments\nevents  applied 0, ") {
		t.Errorf("payments did not begin anew:\n%s", stdout)
	}
}
