package main

import (
	"errors"
	"fmt"
	"io"
	"slices"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"nightsift/internal/astro"
	"nightsift/internal/reference"
	"nightsift/internal/survey"
)

func newReference(out *output) *cobra.Command {
	var to, folder, before, after, center, size, method, add, anchor, parts string
	var near []string
	var scale float64
	var most int
	cmd := &cobra.Command{
		Use:   "reference [FRAME|FOLDER]...",
		Short: "Build a deep reference from frames",
		Long: `Build a deep reference: choose among the frames, register them by their stars on
one grid, bring them to one scale of fluxes, and add them with weights, leaving
out what shows on few of them. Frames that cannot be used are named with the
reason, in the table INPUTS of the result as well.`,
		Example: `  nightsift reference frames/*.fits --before 2026-11-01 --out deep.fits`,
		Args:    cobra.ArbitraryArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			if to == "" {
				return usagef("reference needs --out")
			}
			if len(args) == 0 && add == "" {
				return usagef("reference needs FRAME")
			}
			if !slices.Contains(reference.Methods(), method) {
				return usagef("--method %s: want one of %s", method, strings.Join(reference.Methods(), ", "))
			}
			if most < 0 {
				return usagef("--max-frames %d: want 0 or more", most)
			}
			c, err := stageConfig(folder)
			if err != nil {
				return err
			}
			q := survey.ReferenceRequest{Frames: args, Out: to, Add: add}
			var grid *reference.Grid
			if center != "" || size != "" || scale != 0 {
				if grid, err = parseGrid(center, size, scale); err != nil {
					return err
				}
			}
			from, err := parseDay("--after", after)
			if err != nil {
				return err
			}
			until, err := parseDay("--before", before)
			if err != nil {
				return err
			}
			var exclude []reference.Exclusion
			if len(near) > 0 {
				f, err := openSurvey(folder)
				if err != nil {
					return err
				}
				for _, what := range near {
					e, err := f.BrightTimes(cmd.Context(), what)
					if err != nil {
						return err
					}
					exclude = append(exclude, e...)
				}
			}
			show := map[reference.Stage]func(done, total int){}
			q.Set = func(rc *reference.Config) {
				rc.Method, rc.MaxFrames, rc.Grid, rc.Parts, rc.Exclude = method, most, grid, parts, exclude
				if before != "" {
					rc.Before = until
				}
				if after != "" {
					rc.After = from
				}
				if anchor != "" {
					rc.Anchor = anchor
				}
				rc.Observe = func(p reference.Progress) {
					if show[p.Stage] == nil {
						show[p.Stage] = out.progress(string(p.Stage))
					}
					show[p.Stage](p.Done, p.Total)
				}
			}
			p, err := survey.BuildReference(cmd.Context(), q, c, version)
			var few *reference.NoFramesError
			if errors.As(err, &few) {
				tellLeftOut(out, few.Inputs)
			}
			if err != nil {
				return err
			}
			tellLeftOut(out, p.Inputs)
			printReference(cmd.OutOrStdout(), p, to)
			return nil
		},
	}
	cmd.Long += "\n" + exitHelp
	flags := cmd.Flags()
	flags.StringVar(&to, "out", "", "file to write")
	flags.StringVar(&folder, "survey", "", "survey folder whose configuration and catalogue hold")
	flags.StringVar(&before, "before", "", "only frames taken before this date, YYYY-MM-DD or with time, UTC")
	flags.StringVar(&after, "after", "", "only frames taken from this date on")
	flags.StringArrayVar(&near, "exclude-near", nil, "leave out frames taken while this was bright: an object, a candidate, or RA,DEC; needs --survey; may be repeated")
	flags.IntVar(&most, "max-frames", 0, "use the best so many; 0: all")
	flags.StringVar(&method, "method", reference.MethodAuto, "how to add: "+strings.Join(reference.Methods(), ", "))
	flags.StringVar(&center, "center", "", "centre of the grid as RA,DEC; with --scale and --size")
	flags.Float64Var(&scale, "scale", 0, "pixel of the grid, arcsec")
	flags.StringVar(&size, "size", "", "size of the grid in pixels as W,H")
	flags.StringVar(&anchor, "anchor", "", "frame that gives the grid and the scale of fluxes, by name or path")
	flags.StringVar(&add, "add", "", "add the frames to those of this reference, on its grid")
	flags.StringVar(&parts, "parts", "", "folder where resampled frames are kept, so that adding to them is cheap")
	return cmd
}

// parseDay reads a date as MJD; an empty one is 0.
func parseDay(flag, text string) (float64, error) {
	if text == "" {
		return 0, nil
	}
	mjd, err := astro.ParseDate(text)
	if err != nil {
		return 0, usagef("%s %s: %v", flag, text, err)
	}
	return mjd, nil
}

func parseGrid(center, size string, scale float64) (*reference.Grid, error) {
	if center == "" || size == "" || scale == 0 {
		return nil, usagef("--center, --scale and --size go together")
	}
	var g reference.Grid
	a, b, ok := strings.Cut(center, ",")
	ra, err1 := astro.ParseRA(strings.TrimSpace(a))
	dec, err2 := astro.ParseDec(strings.TrimSpace(b))
	if !ok || err1 != nil || err2 != nil {
		return nil, usagef("--center %s: want RA,DEC in degrees, or as 12:34:56.7,-12:34:56", center)
	}
	g.RA, g.Dec, g.Scale = ra, dec, scale
	if !(scale > 0.001 && scale < 1000) {
		return nil, usagef("--scale %g: want arcsec per pixel, 0.001 to 1000", scale)
	}
	a, b, ok = strings.Cut(size, ",")
	g.Width, err1 = strconv.Atoi(strings.TrimSpace(a))
	g.Height, err2 = strconv.Atoi(strings.TrimSpace(b))
	if !ok || err1 != nil || err2 != nil || g.Width < 128 || g.Height < 128 || g.Width > 32768 || g.Height > 32768 {
		return nil, usagef("--size %s: want W,H, each 128 to 32768", size)
	}
	return &g, nil
}

// tellLeftOut warns of the frames that were not used, and passes on remarks.
func tellLeftOut(out *output, list []reference.Input) {
	for _, in := range list {
		switch {
		case !in.Used:
			out.lines.Warn("frame left out", "frame", in.Name, "reason", in.Reason, "detail", in.Detail)
		case in.Detail != "":
			out.lines.Warn("frame used", "frame", in.Name, "detail", in.Detail)
		}
	}
}

func printReference(w io.Writer, p *reference.Product, path string) {
	used := 0
	for _, in := range p.Inputs {
		if in.Used {
			used++
		}
	}
	fmt.Fprintf(w, "%d of %d frames added (%s: %s)\n", used, len(p.Inputs), p.Method, p.MethodReason)
	fmt.Fprintf(w, "FWHM %.2f px, a point source at 5 sigma has %.4g counts, %.3g times fainter than on the best frame\n%s\n", p.FWHM, p.Limit, p.BestFrame/p.Limit, path)
}
