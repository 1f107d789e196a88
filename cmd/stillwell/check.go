package main

import (
	"fmt"
	"os"

	"github.com/spf13/cobra"

	"stillwell/config"
)

func checkCommand() *cobra.Command {
	return &cobra.Command{
		Use:   "check FILE",
		Short: "validate the file, and explain each estimate",
		Long: `Check tells all faults of a study file at once, each with its place, what is allowed and the ways
out; or, if there are none, what each estimate is, its influence function and variance, which intervals
are valid for it and why, and what each watch will claim.`,
		Example: `  stillwell check harbour.yaml`,
		Args:    oneFile,
		RunE: func(cmd *cobra.Command, args []string) error {
			f, err := load(args[0])
			if err != nil {
				return err
			}
			_, err = fmt.Fprint(os.Stdout, config.Explain(f))
			return err
		},
	}
}
