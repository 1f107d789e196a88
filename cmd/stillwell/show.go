package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"maps"
	"os"
	"slices"
	"text/tabwriter"
	"time"

	"github.com/spf13/cobra"

	"stillwell/cmd/stillwell/internal/station"
)

const samplePeriod = time.Second

func showCommand() *cobra.Command {
	var asJSON bool
	cmd := &cobra.Command{
		Use:   "show DIR",
		Short: "what a state directory holds",
		Long:  `Show reads the newest checkpoint of a state directory, also while a daemon writes to it.`,
		Example: `  stillwell show state
  stillwell show state --json | jq .settled`,
		Args: func(cmd *cobra.Command, args []string) error {
			if len(args) != 1 {
				return wrong{fmt.Errorf("show takes one state directory, got %d; see stillwell show --help", len(args))}
			}
			return nil
		},
		RunE: func(cmd *cobra.Command, args []string) error {
			c, err := station.Show(args[0])
			if errors.Is(err, fs.ErrNotExist) {
				err = fmt.Errorf("%w; the study file names it as state.dir, and without that it is the folder state beside the file", err)
			}
			if err != nil {
				return err
			}
			if asJSON {
				enc := json.NewEncoder(os.Stdout)
				enc.SetIndent("", "  ")
				return enc.Encode(c)
			}
			return showText(os.Stdout, c)
		},
	}
	cmd.Flags().BoolVar(&asJSON, "json", false, "for a program")
	return cmd
}

func showText(out io.Writer, c station.Contents) error {
	w := tabwriter.NewWriter(out, 0, 0, 2, ' ', 0)
	fmt.Fprintf(w, "checkpoint\t%d, saved %s\n", c.Sequence, c.Saved.Format(time.RFC3339))
	fmt.Fprintf(w, "evaluated to\t%s\n", c.Step)
	fmt.Fprintf(w, "size\t%s in %d pages\n", amount(float64(c.Bytes)), c.Pages)
	for _, d := range c.Skipped {
		fmt.Fprintf(w, "skipped\t%s\n", d)
	}
	fmt.Fprintf(w, "events\tread %d, delivered %d, malformed %d, late %d, duplicate %d, ahead %d\n",
		c.Settled.Read, c.Settled.Delivered, c.Settled.Malformed, c.Settled.Late, c.Settled.Duplicate, c.Settled.Ahead)
	fmt.Fprintln(w, "\npartition\tread on at\ttime before it\t")
	for _, p := range c.Partitions {
		note := ""
		if p.Idle {
			note = "silent, left out of the watermark"
		}
		fmt.Fprintf(w, "%s\t%d\t%s\t%s\n", p.Name, p.Offset, p.Max, note)
	}
	for _, name := range slices.Sorted(maps.Keys(c.Studies)) {
		s := c.Studies[name]
		o := s.Outcomes
		fmt.Fprintf(w, "\nstudy %s\n", name)
		fmt.Fprintf(w, "events\tapplied %d, filtered %d, outside %d, waiting %d, conflicting %d, unsampled %d\n",
			o.Applied, o.Filtered, o.Outside, o.Waiting, o.Conflicting, o.Unsampled)
		fmt.Fprintf(w, "state\t%s\n", amount(float64(s.Bytes)))
	}
	return w.Flush()
}
