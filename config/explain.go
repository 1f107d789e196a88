package config

import (
	"fmt"
	"slices"
	"strings"
	"time"

	"stillwell/online"
)

// Explain says in words what a file asks for: what is read, who is followed, and for
// each estimate and watch what it is, what may be claimed of it and when.
func Explain(f *File) string {
	p := &page{}
	p.stream(f)
	for i := range f.Plan.Studies {
		p.study(f, i)
	}
	for _, w := range f.Warnings {
		p.WriteString("\nnote: " + w.Error() + "\n")
	}
	return p.String()
}

// ExplainStudy is Explain for one of f.Plan.Studies.
func ExplainStudy(f *File, i int) string {
	p := &page{}
	p.study(f, i)
	return strings.TrimPrefix(p.String(), "\n")
}

// A page is text of labelled paragraphs.
type page struct{ strings.Builder }

const (
	pageWidth  = 100
	labelWidth = 11
)

func (p *page) head(indent int, format string, args ...any) {
	fmt.Fprintf(p, "\n%s%s\n", strings.Repeat(" ", indent), fmt.Sprintf(format, args...))
}

// item writes a paragraph beside its label, broken into lines at blanks.
func (p *page) item(indent int, label, format string, args ...any) {
	margin := strings.Repeat(" ", indent)
	line := margin + label + strings.Repeat(" ", max(1, labelWidth-len(label)))
	hang := strings.Repeat(" ", indent+labelWidth)
	empty := true
	for _, word := range strings.Fields(fmt.Sprintf(format, args...)) {
		if !empty && len([]rune(line))+1+len([]rune(word)) > pageWidth {
			p.WriteString(line + "\n")
			line, empty = hang, true
		}
		if !empty {
			line += " "
		}
		line += word
		empty = false
	}
	p.WriteString(line + "\n")
}

func (p *page) stream(f *File) {
	s := &f.Stream
	p.WriteString("stream\n")
	if s.Kafka != nil {
		p.item(2, "from", "Kafka: %s", strings.Join(s.Kafka.Topics, ", "))
	}
	if s.File != nil {
		p.item(2, "from", "%s%s", s.File.Path, map[bool]string{true: ", followed as it grows", false: ", to its end"}[s.File.Follow])
	}
	switch {
	case s.Time.Kafka:
		p.item(2, "time", "the message's timestamp")
	case s.Time.Unit != 0:
		p.item(2, "time", "the field %s, a number since 1970 in units of %s", s.Time.Field, s.Time.Unit)
	default:
		p.item(2, "time", "the field %s, RFC 3339", s.Time.Field)
	}
	p.item(2, "order", "events may come %s out of order; an older one is late: counted and kept out", FormatDuration(s.Lateness))
	if s.ID != "" {
		p.item(2, "twice", "an event whose %s was seen within %s is a duplicate: counted and kept out", s.ID, FormatDuration(s.Remember))
	} else {
		p.item(2, "twice", "no id is named, so an event that is delivered twice counts twice")
	}
	p.item(2, "steps", "of %s; intervals at level %s", FormatDuration(f.Plan.Every), number(f.Plan.Level))
}

func (p *page) study(f *File, i int) {
	s := &f.Plan.Studies[i]
	if s.About != "" {
		p.head(0, "study %s: %s", s.Name, strings.Join(strings.Fields(s.About), " "))
	} else {
		p.head(0, "study %s", s.Name)
	}
	p.units(f, s, canonical(f.written[i].entry))
	p.claims(s)
	for j := range s.Estimates {
		p.estimate(f.Plan, s, &s.Estimates[j])
	}
	for j := range s.Watches {
		p.watch(s, &s.Watches[j])
	}
}

func (p *page) units(f *File, s *online.Study, entry string) {
	u := &s.Units
	fields := f.Plan.Fields.Names()
	switch u.Kind {
	case online.Keyed:
		enters := "the first event of each"
		if entry != "" {
			enters = "the first event for which " + entry
		}
		p.item(2, "unit", "%s; it enters with %s", fields[u.Key], enters)
		p.arms(s, fields)
		p.completion(u)
	case online.Buckets:
		p.item(2, "unit", "each %s of event time, complete at its end; the bucket of the first event is left out, since it is a fraction", FormatDuration(u.Every))
	case online.EventsAlone:
		which := "each event"
		if entry != "" {
			which += " for which " + entry
		}
		p.item(2, "unit", "%s, complete at its own time. That events are independent is your assertion, which nothing here can check, and every reading repeats it (\"assumes\": \"independent events\"): if one person sends many, the errors shown are too small", which)
	}
	if u.From != online.NoTime {
		p.item(2, "from", "%s: what enters before is never a unit", instantText(u.From))
	}
	if u.Until != online.NoTime {
		p.item(2, "until", "%s: nothing enters from then on; open units run on", instantText(u.Until))
	}
	if len(u.ByNames) > 0 {
		p.item(2, "segments", "by %s; at most %d, later ones are counted together", strings.Join(u.ByNames, " and "), f.Plan.Limits.Segments)
	}
	p.past(s)
}

func (p *page) arms(s *online.Study, fields []string) {
	u := &s.Units
	if u.Arm < 0 {
		return
	}
	if len(u.Arms) == 0 {
		p.item(2, "arms", "as the field %s of the entry event names them; none is declared, so that shares are not checked and watches are not possible", fields[u.Arm])
	} else {
		total := 0.0
		for _, a := range u.Arms {
			total += a.Share
		}
		var names []string
		for _, a := range u.Arms {
			name := fmt.Sprintf("%s (%.3g%%", a.Name, 100*a.Share/total)
			if a.Name == u.Baseline {
				name += ", the baseline"
			}
			names = append(names, name+")")
		}
		p.item(2, "arms", "%s, as the field %s of the entry event says; other arms are counted and kept out. Whether the units seen fit the planned shares is tested all along; if they do not, intervals and alarms are withheld", strings.Join(names, ", "), fields[u.Arm])
	}
	if u.Leave {
		p.item(2, "conflict", "a unit seen in two arms leaves the study. That selects by what happens after entry: where one arm makes people meet the other more often, those who stay are others, and the comparison is off by it. With conflict: first they stay, as randomised")
	} else {
		p.item(2, "conflict", "a unit seen in two arms stays in its first, as randomised; its other entry is counted")
	}
}

func (p *page) completion(u *online.Units) {
	if u.FollowUp == 0 {
		p.item(2, "complete", "never: no follow_up is given, so a unit's events count without end. Values are those so far, with an interval for one look fixed beforehand; no interval and no watch can hold at every look, since totals that still grow drift under them")
		return
	}
	again := FormatDuration(u.Again) + " later it may enter anew"
	if u.Never {
		again = "it never enters anew"
	}
	p.item(2, "complete", "%s after its entry; %s. Values, intervals at every look and watches are over complete units, in order of completion", FormatDuration(u.FollowUp), again)
}

// past warns of what tallies over the time before entry cannot know.
func (p *page) past(s *online.Study) {
	var longest time.Duration
	var names []string
	for _, t := range s.Tallies {
		if t.Before > 0 {
			longest = max(longest, t.Before)
			names = append(names, t.Name)
		}
	}
	if len(names) > 0 {
		p.item(2, "before", "%s: up to %s before entry. A unit that enters sooner than that after the stream's first event has a shorter past; the arms have this in common, so adjusted effects stay valid", strings.Join(names, ", "), FormatDuration(longest))
	}
}

// claims says once what holds for several estimates.
func (p *page) claims(s *online.Study) {
	days, contrasts, sequences := false, false, len(s.Watches) > 0
	for j := range s.Estimates {
		e := &s.Estimates[j]
		days = days || shaken(s, e)
		contrasts = contrasts || e.Contrast != online.NoContrast
		why, _ := neverAnytime(s, e)
		sequences = sequences || why == ""
	}
	if days {
		p.item(2, "days", "std_error and interval of an estimate without contrast are those of drawing units on these days: what a day does to all units alike is not in them, and only a comparison of arms cancels it")
	}
	if contrasts && !endless(&s.Units) {
		p.item(2, "covers", "an interval for all looks of a contrast covers the effect on the units seen up to then, at every step together. It does not promise that tomorrow's units are alike: where arrival goes with outcome, early units are other people")
	}
	if sequences && s.Units.Kind != online.Buckets {
		p.item(2, "clock", "a boundary's time is the furthest of three that agree while units come evenly: their number, the information, and the sum of squares. It starts when every arm first passes the gate, and its start never moves")
	}
	if len(s.Watches) > 0 {
		p.item(2, "alarms", "a value that is read because an alarm was raised lies too far from the null on average: it is marked \"at_alarm\": true, and later readings are the better ones")
	}
}

func instantText(t int64) string { return time.Unix(0, t).UTC().Format(time.RFC3339) }

// others are the declared arms but the baseline.
func others(u *online.Units) []string {
	return slices.DeleteFunc(armNames(u.Arms), func(name string) bool { return name == u.Baseline })
}
