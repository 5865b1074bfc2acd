package main

import (
	"errors"
	"fmt"
	"io"
	"slices"
	"strconv"
	"strings"
	"text/tabwriter"

	"github.com/spf13/cobra"

	"nightsift/internal/astro"
	"nightsift/internal/reference"
	"nightsift/internal/survey"
)

func newReference(out *output) *cobra.Command {
	var to, folder, before, after, center, size, method, add, anchor, parts string
	var near []string
	var scale, leastGain float64
	var most int
	var look, improve bool
	cmd := &cobra.Command{
		Use:   "reference [FRAME|FOLDER]...",
		Short: "Build a deep reference from frames",
		Long: `Build a deep reference: choose among the frames, register them by their stars on
one grid, bring them to one scale of fluxes, and add them with weights, leaving
out what shows on few of them. Frames that cannot be used are named with the
reason, in the table INPUTS of the result as well.

With --survey and without --out the references of a survey are looked over: which
field and filter has none or a poor one, what a better one would bring, and which
nights were searched with which. Those that are missing are built from the
frames named, or else from the incoming ones. references/ledger.json keeps the
history.`,
		Example: `  nightsift reference frames/*.fits --before 2026-11-01 --out deep.fits
  nightsift reference --survey my-survey --before 2026-11-01`,
		Args: cobra.ArbitraryArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			loose := to != ""
			switch {
			case !loose && folder == "":
				return usagef("reference needs FRAME and --out, or --survey")
			case loose && len(args) == 0 && add == "":
				return usagef("reference needs FRAME")
			case loose && (look || improve || cmd.Flags().Changed("least-gain")):
				return usagef("--dry-run, --improve and --least-gain go with --survey and without --out")
			case !loose && (add != "" || anchor != "" || center != ""):
				return usagef("--add, --anchor and --center need --out: each field of a survey has its own")
			case !(leastGain >= 0 && leastGain < 10):
				return usagef("--least-gain %g: want 0 to 10 mag", leastGain)
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
			set := func(rc *reference.Config) {
				rc.Method, rc.MaxFrames, rc.Grid, rc.Exclude = method, most, grid, exclude
				if loose {
					rc.Parts = parts
				}
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
			if !loose {
				f, err := openSurvey(folder)
				if err != nil {
					return err
				}
				states, err := f.SurveyReferences(cmd.Context(), survey.ReferenceOptions{Version: version, Build: !look, Improve: improve && !look,
					LeastGain: leastGain, Frames: args, Set: set, Parts: parts})
				if err != nil {
					return err
				}
				return printReferences(cmd, out, states)
			}
			q.Set = set
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
			if faulty(p.Inputs) {
				return errSetAside
			}
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
	flags.BoolVar(&look, "dry-run", false, "of a survey: only say how its references stand")
	flags.BoolVar(&improve, "improve", false, "of a survey: replace poor references; the next run then searches their frames anew")
	flags.Float64Var(&leastGain, "least-gain", 0.1, "of a survey: mag by which a typical difference must go deeper for a reference to be poor")
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

// faulty tells whether a frame was left out by a fault of its own rather than by
// what was asked for.
func faulty(list []reference.Input) bool {
	for _, in := range list {
		switch in.Reason {
		case "", reference.ReasonTooEarly, reference.ReasonTooLate, reference.ReasonExcluded, reference.ReasonOtherField, reference.ReasonSurplus, reference.ReasonShallow:
		default:
			return true
		}
	}
	return false
}

// printReferences shows how the references of a survey stand.
func printReferences(cmd *cobra.Command, out *output, states []survey.ReferenceState) error {
	w := tabwriter.NewWriter(cmd.OutOrStdout(), 0, 0, 2, ' ', 0)
	fmt.Fprintln(w, "field\tfilter\treference\tframes\t5 sigma mag\toffered\tnights searched\tstate")
	var failed error
	for _, s := range states {
		file, frames, limit, nights := "-", "-", "-", 0
		if e := s.Entry; e != nil {
			file, nights = e.File, len(e.Nights)
			if e.Version != "" {
				frames = strconv.Itoa(len(e.Frames))
			}
			if e.MagLimit != 0 {
				limit = fmt.Sprintf("%.2f", e.MagLimit)
			}
		}
		state := s.Verdict
		if s.Built != nil {
			state = "built"
			tellLeftOut(out, s.Built.Inputs)
			if s.Own > 0 {
				out.lines.Warn("frames of this reference are searched as well: their differences lack what they share with it, so search later frames only, or keep these elsewhere",
					"field", s.Field, "filter", s.Filter, "frames", s.Own)
			}
			if faulty(s.Built.Inputs) && failed == nil {
				failed = errSetAside
			}
		}
		fmt.Fprintf(w, "%s\t%s\t%s\t%s\t%s\t%d\t%d\t%s\n", s.Field, s.Filter, file, frames, limit, s.Offered, nights, state)
	}
	if err := w.Flush(); err != nil {
		return err
	}
	for _, s := range states {
		switch {
		case s.Fault != "":
			out.lines.Warn("reference not built", "field", s.Field, "filter", s.Filter, "detail", s.Fault)
			failed = errSetAside
		case s.Built == nil:
			fmt.Fprintf(cmd.OutOrStdout(), "%s %s: %s\n", s.Field, s.Filter, s.Advice)
		}
		for _, e := range append(slices.Clone(s.Former), entries(s.Entry)...) {
			if len(e.Nights) > 0 {
				which := "now in place"
				if !e.Current {
					which = "since replaced"
				}
				fmt.Fprintf(cmd.OutOrStdout(), "%s %s: reference %.8s (%s) searched %s\n", s.Field, s.Filter, e.Checksum, which, strings.Join(e.Nights, ", "))
			}
		}
	}
	return failed
}

func entries(e *survey.LedgerEntry) []survey.LedgerEntry {
	if e == nil {
		return nil
	}
	return []survey.LedgerEntry{*e}
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
