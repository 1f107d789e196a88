package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"slices"

	"github.com/spf13/cobra"

	"stillwell/cmd/stillwell/internal/station"
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
				remark(cmd.Context(), os.Stderr, f, done)
			}
			return err
		},
	}
	cmd.Flags().StringArrayVar(&opt.From, "from", nil, "recorded events: a file or pattern, - for standard input; repeatable")
	cmd.Flags().StringVar(&opt.Out, "out", "", "folder to write to; made if need be")
	workersFlag(cmd, &opt.Workers)
	return cmd
}
