package main

import (
	"fmt"
	"os"
	"slices"

	"github.com/spf13/cobra"
	"go.uber.org/zap"
	"go.uber.org/zap/zapcore"

	"stillwell/cmd/stillwell/internal/station"
)

func runCommand() *cobra.Command {
	var opt station.RunOptions
	var verbose bool
	cmd := &cobra.Command{
		Use:   "run FILE",
		Short: "the daemon: follow the file's stream",
		Long: `Run reads the stream that the file names, keeps its state in state.dir, and hands readings and
alarms to the file's sinks. SIGTERM and SIGINT complete an evaluation under way, leave a checkpoint and
exit 0; started again, it goes on as if nothing had happened. A file that is not followed ends at its
end, after a last reading.`,
		Example: `  stillwell run harbour.yaml
  stillwell run harbour.yaml --fresh seat-map     # begin one study anew, leave the others alone`,
		Args: oneFile,
		RunE: func(cmd *cobra.Command, args []string) error {
			f, err := load(args[0])
			if err != nil {
				return err
			}
			for _, name := range opt.Fresh {
				known := make([]string, len(f.Plan.Studies))
				for i := range f.Plan.Studies {
					known[i] = f.Plan.Studies[i].Name
				}
				if !slices.Contains(known, name) {
					return wrong{fmt.Errorf("--fresh %s: the file has no such study; it has %v", name, known)}
				}
			}
			opt.Log = logger(verbose)
			defer func() { _ = opt.Log.Sync() }()
			for _, w := range f.Warnings {
				opt.Log.Warn("allowed, and still worth a word", zap.String("place", fmt.Sprintf("%s:%d:%d", w.File, w.Line, w.Column)), zap.String("remark", w.Message))
			}
			return station.Run(cmd.Context(), f, opt)
		},
	}
	cmd.Flags().StringArrayVar(&opt.Fresh, "fresh", nil, "begin this study anew; repeatable")
	workersFlag(cmd, &opt.Workers)
	cmd.Flags().BoolVar(&verbose, "verbose", false, "log at debug level")
	return cmd
}

// logger writes structured lines to standard error, sampled where they could flood.
func logger(verbose bool) *zap.Logger {
	level := zapcore.InfoLevel
	if verbose {
		level = zapcore.DebugLevel
	}
	enc := zap.NewProductionEncoderConfig()
	enc.EncodeTime = zapcore.RFC3339TimeEncoder
	core := zapcore.NewCore(zapcore.NewJSONEncoder(enc), zapcore.Lock(os.Stderr), level)
	return zap.New(zapcore.NewSamplerWithOptions(core, samplePeriod, 20, 1000))
}

// quiet logs only what a person should not miss.
func quiet() *zap.Logger {
	return zap.New(zapcore.NewCore(zapcore.NewConsoleEncoder(zap.NewDevelopmentEncoderConfig()), zapcore.Lock(os.Stderr), zapcore.WarnLevel))
}
