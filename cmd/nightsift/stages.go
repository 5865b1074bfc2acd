package main

import (
	"errors"
	"fmt"

	"github.com/spf13/cobra"

	"nightsift/internal/frame"
	"nightsift/internal/survey"
)

func newAlign(*output) *cobra.Command {
	var reference, to, folder string
	cmd := &cobra.Command{
		Use:     "align NEW",
		Short:   "Stage 1: register a frame and its reference on the frame's pixel grid",
		Example: "  nightsift align new.fits --reference deep.fits --out aligned.fits",
		Args:    cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			if reference == "" || to == "" {
				return usagef("align needs --reference and --out")
			}
			c, err := stageConfig(folder)
			if err != nil {
				return err
			}
			p, err := survey.AlignFile(cmd.Context(), args[0], reference, to, c, version)
			if err != nil {
				return asSetAside(cmd, args[0], err)
			}
			fmt.Fprintf(cmd.OutOrStdout(), "%d stars matched, residual %.3f px on each axis, flux scale %.4g\n%s\n", len(p.Matches), p.RMS(), p.FluxScale, to)
			return nil
		},
	}
	cmd.Flags().StringVar(&reference, "reference", "", "deep reference")
	cmd.Flags().StringVar(&to, "out", "", "file to write")
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder whose configuration holds")
	return cmd
}

func newSubtract(*output) *cobra.Command {
	var to, folder string
	cmd := &cobra.Command{
		Use:     "subtract ALIGNED",
		Short:   "Stage 2: bring both to one point-spread function and subtract",
		Example: "  nightsift subtract aligned.fits --out difference.fits",
		Args:    cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			if to == "" {
				return usagef("subtract needs --out")
			}
			c, err := stageConfig(folder)
			if err != nil {
				return err
			}
			d, err := survey.SubtractFile(cmd.Context(), args[0], to, c, version)
			if err != nil {
				return asSetAside(cmd, args[0], err)
			}
			fmt.Fprintf(cmd.OutOrStdout(), "FWHM %.2f px (reference %.2f px), noise ratio %.3f\n%s\n", d.Info.FWHMNew, d.Info.FWHMReference, d.Info.NoiseRatio, to)
			return nil
		},
	}
	cmd.Flags().StringVar(&to, "out", "", "file to write")
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder whose configuration holds")
	return cmd
}

func newDetect(*output) *cobra.Command {
	var to, folder string
	var threshold float64
	cmd := &cobra.Command{
		Use:     "detect DIFFERENCE",
		Short:   "Stage 3: find, measure and classify what remains",
		Example: "  nightsift detect difference.fits --out candidates.fits",
		Args:    cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			if to == "" {
				return usagef("detect needs --out")
			}
			c, err := stageConfig(folder)
			if err != nil {
				return err
			}
			if cmd.Flags().Changed("threshold") {
				c.Search.ThresholdSigma = threshold
			}
			if err := c.Validate(); err != nil {
				return usageError{err}
			}
			found, err := survey.DetectFile(cmd.Context(), args[0], to, c)
			if err != nil {
				return asSetAside(cmd, args[0], err)
			}
			likely := 0
			for i := range found {
				if found[i].RealProbability >= 0.5 {
					likely++
				}
			}
			fmt.Fprintf(cmd.OutOrStdout(), "%d candidates, %d with a probability of 0.5 or more\n%s\n", len(found), likely, to)
			return nil
		},
	}
	cmd.Flags().StringVar(&to, "out", "", "file to write")
	cmd.Flags().StringVar(&folder, "survey", "", "survey folder whose configuration holds")
	cmd.Flags().Float64Var(&threshold, "threshold", survey.DefaultConfig().Search.ThresholdSigma, "least significance, sigma")
	return cmd
}

// stageConfig is the configuration of a survey folder, or the default one.
func stageConfig(folder string) (survey.Config, error) {
	if folder == "" {
		return survey.DefaultConfig(), nil
	}
	return survey.LoadConfig(folder)
}

// asSetAside prints why a frame cannot be used and turns the error into the
// exit code for it.
func asSetAside(cmd *cobra.Command, path string, err error) error {
	var p *frame.Problem
	if errors.As(err, &p) {
		fmt.Fprintf(cmd.ErrOrStderr(), "nightsift: %s was set aside, %v\n", path, err)
		return errSetAside
	}
	return err
}
