package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"slices"
	"time"

	"github.com/spf13/cobra"

	"stillwell/cmd/stillwell/internal/station"
	"stillwell/config"
	"stillwell/stream/file"
)

func replayCommand() *cobra.Command {
	var opt station.ReplayOptions
	cmd := &cobra.Command{
		Use:   "replay FILE --from DATA --out DIR",
		Short: "run the file over recorded events",
		Long: `Replay runs the same engine as the daemon over recorded events, in event time and as fast as it
can, and writes readings.jsonl, alarms.jsonl and counters.json to DIR. It ignores the file's state and
sinks, opens no port and delivers nothing. DATA is JSON lines or CSV, plain, gzip or zstd, or - for
standard input; given several times, or as a pattern, each file is a partition.`,
		Example: `  stillwell replay harbour.yaml --from 'events-*.jsonl.gz' --out march
  zcat events.jsonl.gz | stillwell replay harbour.yaml --from - --out march`,
		Args: oneFile,
		RunE: func(cmd *cobra.Command, args []string) error {
			if len(opt.From) == 0 || slices.Contains(opt.From, "") {
				return wrong{fmt.Errorf("replay needs --from DATA: a file of recorded events, or - for standard input")}
			}
			if opt.Out == "" {
				return wrong{fmt.Errorf("replay needs --out DIR: a folder for what it writes")}
			}
			f, err := load(args[0])
			if err != nil {
				return err
			}
			opt.Stdin = os.Stdin
			stop := func() {}
			opt.Watch = func(src *file.Source) { stop = showProgress(os.Stderr, src.Progress) }
			done, err := station.Replay(cmd.Context(), f, opt)
			stop()
			switch {
			case errors.Is(err, context.Canceled):
				return fmt.Errorf("stopped before the end of the events; what %s holds is not complete", opt.Out)
			case err == nil:
				remarkLate(cmd.Context(), os.Stderr, f, done)
			}
			return err
		},
	}
	cmd.Flags().StringArrayVar(&opt.From, "from", nil, "recorded events: a file or pattern, - for standard input; repeatable")
	cmd.Flags().StringVar(&opt.Out, "out", "", "folder to write to; made if need be")
	workersFlag(cmd, &opt.Workers)
	return cmd
}

// remarkLate tells, if more than a hundredth of the events were late, which line may have made
// them so: the one that moved time furthest.
func remarkLate(ctx context.Context, out io.Writer, f *config.File, done station.Replayed) {
	c, at := done.Counters.Stream, done.Furthest
	if 100*c.Late <= c.Read || at.By == 0 {
		return
	}
	name := at.Partition
	if name == file.StdinName {
		name = "standard input"
	}
	where, text := fmt.Sprintf("The event at byte %d of %s", at.Position, name), ""
	if line, number, err := station.Line(ctx, f, at.Partition, at.Position); err == nil && number > 0 {
		where, text = fmt.Sprintf("Line %d of %s", number, name), ":\n  "+clip(line, 200)
	}
	unit := time.Second
	if at.By > 48*time.Hour {
		unit = 24 * time.Hour
	}
	fmt.Fprintf(out, `%d of %d events (%.1f%%) were late and kept out.
%s moved time furthest, by %s%s
If its time is wrong, let stream.between keep such times out; if events may come that late, raise stream.lateness.
`, c.Late, c.Read, 100*float64(c.Late)/float64(c.Read), where, config.FormatDuration(at.By.Round(unit)), text)
}
