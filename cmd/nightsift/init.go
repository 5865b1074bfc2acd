package main

import (
	"fmt"
	"path/filepath"

	"github.com/spf13/cobra"

	"nightsift/internal/survey"
)

func newInit(*output) *cobra.Command {
	return &cobra.Command{
		Use:     "init DIR",
		Short:   "Make a survey folder with a commented configuration",
		Example: "  nightsift init my-survey",
		Args:    cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := survey.Init(args[0]); err != nil {
				return err
			}
			fmt.Fprintf(cmd.OutOrStdout(), `made %s
Next: put one deep frame for each field and filter into %s,
new frames into %s, and start
  nightsift run --survey %s
`, filepath.Join(args[0], survey.ConfigName), filepath.Join(args[0], "references"), filepath.Join(args[0], "incoming"), args[0])
			return nil
		},
	}
}
