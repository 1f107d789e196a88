package main

import (
	"context"
	"fmt"
	"io"
	"strings"
	"time"
	"unicode"

	"stillwell/cmd/stillwell/internal/station"
	"stillwell/config"
	"stillwell/stream/file"
)

// remark tells, at the end of a replay, of what a hundredth of the events or more suffered
// from, and where to look.
func remark(ctx context.Context, out io.Writer, f *config.File, done station.Replayed) {
	c := done.Counters.Stream
	share := func(n int64) string {
		return fmt.Sprintf("%d of %d events (%.1f%%)", n, c.Read, 100*float64(n)/float64(c.Read))
	}
	if first := done.Malformed; 100*c.Malformed > c.Read {
		where, line := place(ctx, f, first.Partition, first.Position)
		fmt.Fprintf(out, "%s were malformed and kept out.\n%s was the first: %s%s\n", share(c.Malformed), where, first.Fault, line)
	}
	if by := done.Furthest.By; 100*c.Late > c.Read && by > 0 {
		unit := time.Second
		if by > 48*time.Hour {
			unit = 24 * time.Hour
		}
		where, line := place(ctx, f, done.Furthest.Partition, done.Furthest.Position)
		fmt.Fprintf(out, "%s were late and kept out.\n%s moved time furthest, by %s%s\n"+
			"If its time is wrong, let stream.between keep such times out; if events may come that late, raise stream.lateness.\n",
			share(c.Late), where, config.FormatDuration(by.Round(unit)), line)
	}
}

// place names an event, by its line where that can be found, and shows it.
func place(ctx context.Context, f *config.File, partition string, position int64) (where, line string) {
	name := partition
	if name == file.StdinName {
		name = "standard input"
	}
	text, number, err := station.Line(ctx, f, partition, position)
	if err != nil || number == 0 {
		return fmt.Sprintf("The event at byte %d of %s", position, name), ""
	}
	return fmt.Sprintf("Line %d of %s", number, name), ":\n  " + harmless(text)
}

// harmless is what came from outside, cut to a line, without anything that a terminal would obey.
func harmless(text string) string {
	const most = 200
	var b strings.Builder
	n := 0
	for _, r := range text {
		if n++; n > most {
			b.WriteString("…")
			break
		}
		if !unicode.IsPrint(r) {
			r = unicode.ReplacementChar
		}
		b.WriteRune(r)
	}
	return b.String()
}
