package main

import (
	"fmt"
	"path/filepath"
	"strings"

	"github.com/spf13/cobra"

	"nightsift/internal/simulate"
)

func newSimulate(*output) *cobra.Command {
	var size int
	var seed uint64
	var to string
	var list strings.Builder
	for _, name := range simulate.Names() {
		fmt.Fprintf(&list, "\n  %-22s %s", name, simulate.About(name))
	}
	cmd := &cobra.Command{
		Use:   "simulate SCENARIO",
		Short: "Write invented frames with a table of what was put into them",
		Long: `Write an invented reference, a new frame and the truth: reference.fits, new-1.fits,
truth.fits, truth.csv, truth-frames.csv. The same arguments give the same bytes.

Scenarios:` + list.String(),
		Example:   "  nightsift simulate plain --size 1024 --seed 7 --out invented",
		Args:      cobra.ExactArgs(1),
		ValidArgs: simulate.Names(),
		RunE: func(cmd *cobra.Command, args []string) error {
			if to == "" {
				return usagef("simulate needs --out")
			}
			if simulate.About(args[0]) == "" {
				return usagef("no scenario %q: want one of %s", args[0], strings.Join(simulate.Names(), ", "))
			}
			if size < 128 || size > 16384 {
				return usagef("--size %d: want 128 to 16384", size)
			}
			p, err := simulate.Scenario(args[0], size, seed)
			if err != nil {
				return err
			}
			if err := p.Write(to); err != nil {
				return err
			}
			fmt.Fprintf(cmd.OutOrStdout(), "%s\n%s\n", filepath.Join(to, p.Reference.Name+".fits"), filepath.Join(to, "truth.fits"))
			for _, e := range p.New {
				fmt.Fprintln(cmd.OutOrStdout(), filepath.Join(to, e.Name+".fits"))
			}
			return nil
		},
	}
	cmd.Flags().IntVar(&size, "size", 1024, "side of the frames, px")
	cmd.Flags().Uint64Var(&seed, "seed", 1, "seed")
	cmd.Flags().StringVar(&to, "out", "", "folder to write into")
	return cmd
}
