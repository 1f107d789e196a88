// Stillwell reads an event stream and holds steady numbers whose uncertainty is honest
// at every moment anyone looks.
package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"os/signal"
	"syscall"

	"github.com/spf13/cobra"

	"stillwell/cmd/stillwell/internal/station"
	"stillwell/config"
)

// Exit codes, which scripts rely on.
const (
	exitDone   = 0
	exitFailed = 1
	exitWrong  = 2 // the file or the arguments are wrong
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	context.AfterFunc(ctx, stop) // a second signal ends the program at once
	code := execute(ctx, os.Args[1:])
	stop()
	os.Exit(code)
}

// wrong is an error of the arguments.
type wrong struct{ error }

func (w wrong) Unwrap() error { return w.error }

func execute(ctx context.Context, args []string) int {
	root := &cobra.Command{
		Use:   "stillwell",
		Short: "steady numbers from a running stream, with honest uncertainty",
		Long: `Stillwell reads an event stream, keeps sufficient statistics for each independent unit, and
gives every declared quantity an estimate, a standard error, an interval that is valid at every
look, and alarms at a stated false-alarm rate.`,
		Example: `  stillwell demo
  stillwell check harbour.yaml
  stillwell run harbour.yaml`,
		SilenceErrors: true, SilenceUsage: true,
		CompletionOptions: cobra.CompletionOptions{HiddenDefaultCmd: true},
	}
	root.SetArgs(args)
	root.SuggestionsMinimumDistance = 2
	root.SetFlagErrorFunc(func(cmd *cobra.Command, err error) error {
		return wrong{fmt.Errorf("%w; see %s --help", err, cmd.CommandPath())}
	})
	root.AddCommand(demoCommand(), checkCommand(), runCommand(), replayCommand(), showCommand())
	root.SetHelpCommand(&cobra.Command{
		Use:     "help [COMMAND]",
		Short:   "what a command does",
		Example: `  stillwell help replay`,
		RunE: func(cmd *cobra.Command, args []string) error {
			about, rest, err := root.Find(args)
			if err != nil || len(rest) > 0 {
				return noCommand(root, args[0])
			}
			return about.Help()
		},
	})
	root.RunE = func(cmd *cobra.Command, args []string) error { return cmd.Help() }
	root.Args = func(cmd *cobra.Command, args []string) error {
		if len(args) > 0 {
			return noCommand(root, args[0])
		}
		return nil
	}
	err := root.ExecuteContext(ctx)
	var faults config.Faults
	var usage wrong
	switch {
	case err == nil:
		return exitDone
	case errors.As(err, &faults):
		fmt.Fprintln(os.Stderr, err)
		return exitWrong
	case errors.As(err, &usage), errors.Is(err, station.ErrEdited):
		fmt.Fprintln(os.Stderr, "stillwell:", err)
		return exitWrong
	}
	fmt.Fprintln(os.Stderr, "stillwell:", err)
	return exitFailed
}

func noCommand(root *cobra.Command, name string) error {
	meant := ""
	if near := root.SuggestionsFor(name); len(near) > 0 {
		meant = fmt.Sprintf("; did you mean %s?", near[0])
	}
	return wrong{fmt.Errorf("no command %q%s; see stillwell --help", name, meant)}
}

// load reads the study file of the command line.
func load(path string) (*config.File, error) {
	f, err := config.Load(path)
	if errors.Is(err, fs.ErrNotExist) {
		err = fmt.Errorf("%w; check the path", err)
	}
	if err != nil {
		return nil, wrong{err}
	}
	return f, nil
}

// workersFlag is how many goroutines a command may use.
func workersFlag(cmd *cobra.Command, n *int) {
	cmd.Flags().IntVar(n, "workers", 0, "goroutines that decode and count (default: one a processor)")
	check := cmd.Args
	cmd.Args = func(cmd *cobra.Command, args []string) error {
		if *n < 0 {
			return wrong{fmt.Errorf("--workers %d: want a number from 1 on, or 0 for one a processor", *n)}
		}
		return check(cmd, args)
	}
}

// oneFile asks for the study file as the only argument.
func oneFile(cmd *cobra.Command, args []string) error {
	if len(args) != 1 {
		return wrong{fmt.Errorf("%s takes one study file, got %d; see stillwell %s --help", cmd.Name(), len(args), cmd.Name())}
	}
	return nil
}
