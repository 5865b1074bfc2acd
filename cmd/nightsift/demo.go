package main

import (
	"fmt"

	"github.com/spf13/cobra"

	"nightsift/internal/demo"
)

func newDemo(out *output) *cobra.Command {
	o := demo.Options{Version: version}
	cmd := &cobra.Command{
		Use:   "demo",
		Short: "Search an invented survey and compare with what was put into it",
		Long: `Invent a small survey of three fields and four nights, with supernovae on their
hosts, variable stars, asteroids, cosmic rays and bad frames; search it as any
survey; compare with the truth. Needs no network and nothing but the folder.

The command succeeds when every bad frame was set aside and no other.`,
		Example: "  nightsift demo --out demo",
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			progress := out.progress("inventing frames")
			o.Writing = func(done, total int, file string) { progress(done, total) }
			o.Observe = out.observer()
			r, err := demo.Run(cmd.Context(), o)
			if err != nil {
				return err
			}
			if err := r.WriteText(cmd.OutOrStdout()); err != nil {
				return err
			}
			if r.Writing > 0 {
				out.lines.Info("time spent", "inventing", r.Writing.Round(1e8).String(), "searching", r.Search.Round(1e8).String())
			}
			if !r.OK() {
				return fmt.Errorf("some frames met another fate than they were made for")
			}
			return nil
		},
	}
	cmd.Flags().StringVar(&o.Dir, "out", "demo", "folder to make")
	cmd.Flags().Uint64Var(&o.Seed, "seed", 1, "seed: the same seed gives the same survey")
	cmd.Flags().IntVar(&o.Jobs, "jobs", 0, "frames at once; 0: one for each core")
	return cmd
}
