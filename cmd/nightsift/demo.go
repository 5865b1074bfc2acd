package main

import (
	"errors"
	"fmt"
	"slices"
	"strings"

	"github.com/spf13/cobra"

	"nightsift/internal/demo"
	"nightsift/internal/reference"
	"nightsift/internal/simulate"
	"nightsift/internal/trial"
)

func newDemo(out *output) *cobra.Command {
	o := demo.Options{Version: version}
	var figures bool
	var scenarios []string
	var size, frames int
	cmd := &cobra.Command{
		Use:   "demo",
		Short: "Search an invented survey and compare with what was put into it",
		Long: `Invent a small survey of three fields and six nights, with supernovae on their
hosts, variable stars, asteroids, cosmic rays and bad frames; build the references
from exposures of the season before; search the nights as those of any survey,
with artificial sources that tell what is missed; follow the supernovae in time
and name the asteroids; compare with the truth. Needs no network and nothing but
the folder.

The command succeeds when every bad frame was set aside and no other.

With --score the scenarios of "nightsift simulate" are searched instead, in
memory, and a table tells how good the search is: alignment, significance on
empty sky, completeness, false candidates, bias of fluxes, pulls.`,
		Example: "  nightsift demo --out demo",
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			if figures {
				return runScore(cmd, scenarios, size, frames, o.Seed)
			}
			for _, name := range []string{"scenario", "size", "frames"} {
				if cmd.Flags().Changed(name) {
					return usagef("--%s goes with --score", name)
				}
			}
			progress := out.progress("inventing frames")
			o.Writing = func(done, total int, file string) { progress(done, total) }
			building := map[reference.Stage]func(done, total int){}
			o.Building = func(p reference.Progress) {
				if building[p.Stage] == nil {
					building[p.Stage] = out.progress("references: " + string(p.Stage))
				}
				building[p.Stage](p.Done, p.Total)
			}
			o.Observe = out.observer()
			r, err := demo.Run(cmd.Context(), o)
			if err != nil {
				return err
			}
			if err := r.WriteText(cmd.OutOrStdout()); err != nil {
				return err
			}
			if r.Writing > 0 {
				out.lines.Info("time spent", "inventing", r.Writing.Round(1e8).String(), "references", r.Building.Round(1e8).String(),
					"searching", r.Search.Round(1e8).String(), "light curves and movers", r.Follow.Round(1e8).String())
			}
			if !r.OK() {
				return errors.New("some frames met another fate than they were made for")
			}
			return nil
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&o.Dir, "out", "demo", "folder to make")
	flags.Uint64Var(&o.Seed, "seed", 1, "seed: the same seed gives the same survey")
	flags.IntVar(&o.Jobs, "jobs", 0, "frames at once; 0: one for each core")
	flags.BoolVar(&figures, "score", false, "print the table of figures over scored scenarios instead")
	flags.StringSliceVar(&scenarios, "scenario", nil, "with --score: only these scenarios")
	flags.IntVar(&size, "size", 1024, "with --score: side of the frames, px")
	flags.IntVar(&frames, "frames", 1, "with --score: frames of each scenario")
	return cmd
}

func runScore(cmd *cobra.Command, scenarios []string, size, frames int, seed uint64) error {
	switch {
	case size < 256 || size > 8192:
		return usagef("--size %d: want 256 to 8192", size)
	case frames < 1:
		return usagef("--frames %d: want 1 or more", frames)
	}
	for _, s := range scenarios {
		if !slices.Contains(simulate.Names(), s) {
			return usagef("no scenario %q: want one of %s", s, strings.Join(simulate.Names(), ", "))
		}
	}
	all, err := demo.Figures(cmd.Context(), scenarios, size, frames, seed, func(o *trial.Outcome) {
		fmt.Fprintf(cmd.ErrOrStderr(), "%s done\n", o.Scenario)
	})
	if err != nil {
		return err
	}
	return trial.WriteTable(cmd.OutOrStdout(), all)
}
