package oracle

import (
	"fmt"
	"strings"
	"time"
)

// YAML is the description as a study file that reads events from a path.
func (f *File) YAML(path string) string {
	var b strings.Builder
	line := func(indent int, format string, args ...any) {
		fmt.Fprintf(&b, strings.Repeat("  ", indent)+format+"\n", args...)
	}
	line(0, "stream:")
	line(1, "file: {path: %s}", path)
	if f.Stream.Unix > 0 {
		unit := map[time.Duration]string{time.Second: "s", time.Millisecond: "ms", time.Microsecond: "us", time.Nanosecond: "ns"}[f.Stream.Unix]
		line(1, "time: {field: %s, unix: %s}", f.Stream.Time, unit)
	} else {
		line(1, "time: %s", f.Stream.Time)
	}
	if f.Stream.ID != "" {
		line(1, "id: %s", f.Stream.ID)
	}
	if f.Stream.Lateness > 0 {
		line(1, "lateness: %s", f.Stream.Lateness)
	}
	if f.Stream.Remember > 0 {
		line(1, "remember: %s", f.Stream.Remember)
	}
	line(0, "studies:")
	for i := range f.Studies {
		f.Studies[i].yaml(line)
	}
	line(0, "readings: {every: %s, level: %v}", f.Every, f.Level)
	if f.Segments > 0 {
		line(0, "limits: {segments: %d}", f.Segments)
	}
	return b.String()
}

func (s *Study) yaml(line func(int, string, ...any)) {
	line(1, "- name: %s", s.Name)
	line(2, "units:")
	switch {
	case s.Bucket > 0:
		line(3, "every: %s", s.Bucket)
	case s.Events:
		line(3, "events: independent")
	default:
		line(3, "key: %s", s.Key)
	}
	if s.Entry != nil {
		line(3, "entry: %s", quote(s.Entry.Text))
	}
	if s.Arm != "" {
		line(3, "arm: %s", s.Arm)
		line(3, "baseline: %s", quote(s.Baseline))
	}
	if s.Arms != nil {
		shares := make([]string, len(s.Arms))
		for i, a := range s.Arms {
			shares[i] = quote(a) + ": 1"
		}
		line(3, "arms: {%s}", strings.Join(shares, ", "))
	}
	if s.Leave {
		line(3, "conflict: leave")
	}
	if s.FollowUp > 0 {
		line(3, "follow_up: %s", s.FollowUp)
	}
	if !s.From.IsZero() {
		line(3, "from: %s", s.From.Format(time.RFC3339Nano))
	}
	if !s.Until.IsZero() {
		line(3, "until: %s", s.Until.Format(time.RFC3339Nano))
	}
	switch {
	case s.Never:
		line(3, "again: never")
	case s.Again > 0:
		line(3, "again: %s", s.Again)
	}
	if len(s.By) > 0 {
		line(3, "by: [%s]", strings.Join(s.By, ", "))
	}
	line(2, "tallies:")
	for _, t := range s.Tallies {
		line(3, "%s: %s", t.Name, t.yaml())
	}
	line(2, "estimates:")
	for _, e := range s.Estimates {
		line(3, "%s: %s", e.Name, e.yaml())
	}
}

func (t *Tally) yaml() string {
	var parts []string
	if t.Kind == Count || t.Kind == Any {
		parts = append(parts, string(t.Kind)+": "+quote(t.When.Text))
	} else {
		parts = append(parts, string(t.Kind)+": "+quote(t.Value.Text))
		if t.When != nil {
			parts = append(parts, "when: "+quote(t.When.Text))
		}
	}
	switch {
	case t.Grain > 0:
		parts = append(parts, fmt.Sprintf("before: {span: %s, grain: %s}", t.Before, t.Grain))
	case t.Before > 0:
		parts = append(parts, fmt.Sprintf("before: %s", t.Before))
	}
	return "{" + strings.Join(parts, ", ") + "}"
}

func (e *Estimate) yaml() string {
	parts := []string{"of: " + quote(e.Of.Text)}
	if e.Contrast != "" {
		parts = append(parts, "contrast: "+e.Contrast)
		if e.Present {
			parts = append(parts, "among: present")
		}
	}
	if len(e.Adjust) > 0 {
		names := make([]string, len(e.Adjust))
		for i, c := range e.Adjust {
			if names[i] = c.Tally; c.Tally == "" {
				names[i] = "{field: " + c.Field + "}"
			}
		}
		parts = append(parts, "adjust: ["+strings.Join(names, ", ")+"]")
	}
	return "{" + strings.Join(parts, ", ") + "}"
}

func quote(s string) string { return "'" + strings.ReplaceAll(s, "'", "''") + "'" }
