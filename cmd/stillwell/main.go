// Stillwell reads an event stream and holds steady numbers whose uncertainty is honest
// at every moment anyone looks.
package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"os/signal"
	"syscall"

	"github.com/spf13/cobra"

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
		SilenceErrors: true, SilenceUsage: true,
		CompletionOptions: cobra.CompletionOptions{HiddenDefaultCmd: true},
	}
	root.SetArgs(args)
	root.SetFlagErrorFunc(func(_ *cobra.Command, err error) error { return wrong{err} })
	root.AddCommand(demoCommand(), checkCommand(), runCommand(), replayCommand(), showCommand())
	root.RunE = func(cmd *cobra.Command, args []string) error { return cmd.Help() }
	root.Args = func(cmd *cobra.Command, args []string) error {
		if len(args) > 0 {
			return wrong{fmt.Errorf("no command %q; see stillwell --help", args[0])}
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
	case errors.As(err, &usage):
		fmt.Fprintln(os.Stderr, "stillwell:", err)
		return exitWrong
	}
	fmt.Fprintln(os.Stderr, "stillwell:", err)
	return exitFailed
}

// oneFile asks for the study file as the only argument.
func oneFile(cmd *cobra.Command, args []string) error {
	if len(args) != 1 {
		return wrong{fmt.Errorf("%s takes one study file, got %d; see stillwell %s --help", cmd.Name(), len(args), cmd.Name())}
	}
	return nil
}
