package config

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"strconv"
	"strings"
	"time"

	"stillwell/online"
)

// A Fingerprint is what of a study, or of the stream, decides numbers. State that was
// made under another one must not be carried on: some of its units would have been
// counted by one rule and some by another.
type Fingerprint struct {
	Hash  string   // of Lines
	Lines []string // "key: value", in a fixed order; defaults are written out
}

// Changes tells how the lines of two fingerprints differ, one sentence a line.
func (f Fingerprint) Changes(was []string) []string {
	before, now := map[string]string{}, map[string]string{}
	for _, line := range was {
		key, value, _ := strings.Cut(line, ": ")
		before[key] = value
	}
	var out []string
	for _, line := range f.Lines {
		key, value, _ := strings.Cut(line, ": ")
		now[key] = value
		switch old, had := before[key]; {
		case !had:
			out = append(out, fmt.Sprintf("%s is new: %s", key, value))
		case old != value:
			out = append(out, fmt.Sprintf("%s was %s and is %s", key, old, value))
		}
	}
	for _, line := range was {
		key, value, _ := strings.Cut(line, ": ")
		if _, has := now[key]; !has {
			out = append(out, fmt.Sprintf("%s is gone; it was %s", key, value))
		}
	}
	return out
}

// A printer gathers lines.
type printer []string

func (p *printer) line(key, format string, args ...any) {
	*p = append(*p, strings.ReplaceAll(key+": "+fmt.Sprintf(format, args...), "\n", `\n`))
}

// given writes a line only where there is something to write.
func (p *printer) given(key, text string) {
	if text != "" {
		p.line(key, "%s", text)
	}
}

func (p *printer) duration(key string, d time.Duration) {
	if d != 0 {
		p.line(key, "%s", FormatDuration(d))
	}
}

func (p *printer) instant(key string, t int64) {
	if t != online.NoTime {
		p.line(key, "%s", time.Unix(0, t).UTC().Format(time.RFC3339Nano))
	}
}

func (p *printer) number(key string, x float64) {
	if x != 0 {
		p.line(key, "%s", number(x))
	}
}

func (p printer) fingerprint() Fingerprint {
	sum := sha256.Sum256([]byte(strings.Join(p, "\n")))
	return Fingerprint{Hash: hex.EncodeToString(sum[:16]), Lines: p}
}

// number writes a number in the shortest way that reads back the same.
func number(x float64) string { return strconv.FormatFloat(x, 'g', -1, 64) }

// prints sets the file's fingerprints.
func (f *File) prints() {
	f.StreamPrint = f.Stream.print(f.sourceFile)
	for i := range f.Plan.Studies {
		f.StudyPrints = append(f.StudyPrints, f.studyPrint(i))
	}
}

// print leaves out what decides only where and when, not which numbers: brokers and
// their secrets, the group, where to begin without a checkpoint, waiting times.
func (s *Stream) print(file string) Fingerprint {
	var p printer
	if s.Kafka != nil {
		p.line("kafka.topics", "%s", strings.Join(s.Kafka.Topics, ", "))
	}
	p.given("file.path", file)
	p.line("format", "%s", map[bool]string{false: "json", true: "csv"}[s.CSV])
	switch {
	case s.Time.Kafka:
		p.line("time", "timestamp of the message")
	case s.Time.Unit != 0:
		p.line("time", "%s, in units of %s since 1970", s.Time.Field, s.Time.Unit)
	default:
		p.line("time", "%s, RFC 3339", s.Time.Field)
	}
	p.given("id", s.ID)
	p.line("lateness", "%s", FormatDuration(s.Lateness))
	if s.ID != "" {
		p.line("remember", "%s", FormatDuration(s.Remember))
	}
	p.line("ahead", "%s", FormatDuration(s.Ahead))
	p.instant("between.from", s.From)
	p.instant("between.to", s.To)
	p.line("max_line", "%d", s.MaxLine)
	return p.fingerprint()
}

func (f *File) studyPrint(i int) Fingerprint {
	s, w := &f.Plan.Studies[i], &f.written[i]
	var p printer
	p.line("name", "%s", s.Name)
	p.line("readings.every", "%s", FormatDuration(f.Plan.Every))
	p.line("readings.level", "%s", number(f.Plan.Level))
	p.line("limits.units", "%d", f.Plan.Limits.Units)
	p.line("limits.rows", "%d", f.Plan.Limits.Rows)
	p.line("limits.segments", "%d", f.Plan.Limits.Segments)
	f.printUnits(&p, &s.Units, w)
	for j := range s.Tallies {
		printTally(&p, &s.Tallies[j], w.tallies[j])
	}
	for j := range s.Estimates {
		printEstimate(&p, &s.Estimates[j])
	}
	for j := range s.Watches {
		printWatch(&p, &s.Watches[j], s)
	}
	return p.fingerprint()
}

func (f *File) printUnits(p *printer, u *online.Units, w *written) {
	fields := f.Plan.Fields.Names()
	switch u.Kind {
	case online.Keyed:
		p.line("units.key", "%s", fields[u.Key])
	case online.Buckets:
		p.line("units.every", "%s", FormatDuration(u.Every))
	case online.EventsAlone:
		p.line("units.events", "independent")
	}
	p.given("units.entry", canonical(w.entry))
	if u.Arm >= 0 {
		p.line("units.arm", "%s", fields[u.Arm])
		p.given("units.baseline", u.Baseline)
		for _, a := range u.Arms {
			p.line("units.arms."+a.Name, "%s", number(a.Share))
		}
		p.line("units.conflict", "%s", map[bool]string{false: "first", true: "leave"}[u.Leave])
	}
	p.duration("units.follow_up", u.FollowUp)
	p.instant("units.from", u.From)
	p.instant("units.until", u.Until)
	if u.FollowUp > 0 {
		if u.Never {
			p.line("units.again", "never")
		} else {
			p.line("units.again", "%s", FormatDuration(u.Again))
		}
	}
	p.given("units.by", strings.Join(u.ByNames, ", "))
}

func printTally(p *printer, t *online.Tally, w tallyText) {
	key := "tallies." + t.Name
	p.given(key+"."+tallyWords[t.Kind], canonical(w.value))
	when := key + ".when"
	if t.Value == nil {
		when = key + "." + tallyWords[t.Kind]
	}
	p.given(when, canonical(w.when))
	p.duration(key+".before", t.Before)
	p.duration(key+".grain", t.Grain)
}

func printEstimate(p *printer, e *online.Estimate) {
	key := "estimates." + e.Name
	p.line(key+".of", "%s", e.Of)
	p.given(key+".contrast", e.Contrast.String())
	var names []string
	for _, c := range e.Adjust {
		if c.Tally < 0 {
			names = append(names, "field "+c.Name)
		} else {
			names = append(names, c.Name)
		}
	}
	p.given(key+".adjust", strings.Join(names, ", "))
	if e.Present {
		p.line(key+".among", "present")
	}
	p.duration(key+".window", e.Window)
	p.number(key+".tune_for", e.TuneFor)
	p.duration(key+".start", e.Start)
}

func printWatch(p *printer, w *online.Watch, s *online.Study) {
	key := "watches." + w.Name
	p.line(key+".on", "%s", s.Estimates[w.Estimate].Name)
	p.line(key+".against", "%s %s", w.Against, number(w.Null))
	p.line(key+".error", "%s", number(w.Error))
	p.number(key+".tune_for", w.TuneFor)
	p.duration(key+".start", w.Start)
	if w.Any {
		p.line(key+".segments", "any")
	}
	p.given(key+".segments", strings.Join(w.Segments, ", "))
}
