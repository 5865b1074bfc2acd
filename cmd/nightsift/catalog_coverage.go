package main

import (
	"fmt"
	"io"
	"math"
	"strings"

	"github.com/spf13/cobra"

	"nightsift/catalog"
	"nightsift/internal/wholefile"
)

func newCatalogCoverage() *cobra.Command {
	var folder, to string
	q := catalog.CoverageQuery{Order: 13}
	cmd := &cobra.Command{
		Use:   "coverage",
		Short: "Map what was searched, as a multi-order coverage map (MOC)",
		Long: `Map the searched frames of a night, a filter, a field, or all, as a multi-order
coverage map of the Virtual Observatory (MOC 2.0): .fits in the form NUNIQ, .json
as lists of pixels by order. A pixel belongs to the map if its centre is on a
searched frame. Pixels of --order 13 are 26 arcseconds wide; each order halves
that. Frames that were set aside or failed are not in it.`,
		Example: `  nightsift catalog coverage --survey my-survey --night 2027-01-05 --filter g --out coverage.fits
  nightsift catalog coverage --survey my-survey --deeper-than 20.5 --out deep.json`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			json := strings.HasSuffix(to, ".json")
			switch {
			case !json && !strings.HasSuffix(to, ".fits"):
				return usagef("--out %s: want a file name that ends in .fits or .json", to)
			case q.Order < 0 || q.Order > 18:
				return usagef("--order %d: want 0 to 18", q.Order)
			}
			return withStore(cmd, folder, false, func(s *catalog.Store) error {
				c, err := s.Coverage(cmd.Context(), q)
				if err != nil {
					return err
				}
				err = wholefile.Write(to, func(w io.Writer) error {
					if json {
						return c.Map.EncodeJSON(w)
					}
					return c.Map.EncodeFITS(w)
				})
				if err != nil {
					return err
				}
				fmt.Fprintf(cmd.OutOrStdout(), "%s: %.4f square degrees, searched on %d frames", to, c.Map.Area(), c.Frames)
				if !math.IsNaN(c.Deepest) {
					fmt.Fprintf(cmd.OutOrStdout(), ", limits %.3f to %.3f mag", c.Shallowest, c.Deepest)
				}
				if c.Footless > 0 {
					fmt.Fprintf(cmd.OutOrStdout(), "; %d more have no known footprint", c.Footless)
				}
				fmt.Fprintln(cmd.OutOrStdout())
				return nil
			})
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&q.Night, "night", "", "frames of this night (YYYY-MM-DD)")
	flags.StringVar(&q.Filter, "filter", "", "frames of this filter")
	flags.StringVar(&q.Field, "field", "", "frames of this field")
	flags.Float64Var(&q.DeeperThan, "deeper-than", 0, "frames whose 5 sigma limit is at least this magnitude; 0: all")
	flags.IntVar(&q.Order, "order", q.Order, "order of the smallest pixels")
	flags.StringVar(&to, "out", "", "file to write, .fits or .json")
	return cmd
}

func newCatalogDepth() *cobra.Command {
	var folder, filter, format, to string
	mag := math.NaN()
	cmd := &cobra.Command{
		Use:   "depth RA,DEC|OBJECT",
		Short: "Tell when a position was searched, how deep, and what a source there would have given",
		Long: `Tell when a position was searched: each searched frame that covers it, with its
limit for 5 sigma and, where it was measured, the magnitude at which half of all
sources are found. With --mag also the significance that a source of this
magnitude would have had on each frame, and the probability that the frame, and
at least one of all, would have found it. The expected significance holds where
the noise of the sky dominates; that of a source far above the limit is too high.
The summary goes to stderr, the table to stdout or --out.`,
		Example: `  nightsift catalog depth 150.1,2.2 --survey my-survey --mag 20.5
  nightsift catalog depth 10:00:24,+02:12:00 --survey my-survey --filter g --out depth.ecsv --format ecsv`,
		Args: cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			form, err := catalog.FindFormat(format)
			if err != nil {
				return usagef("--format: %v", err)
			}
			switch {
			case to == "" && !form.Text:
				return usagef("--format %s needs --out: it is not text", format)
			case math.IsInf(mag, 0):
				return usagef("--mag %v: want a magnitude", mag)
			}
			f, err := openSurvey(folder)
			if err != nil {
				return err
			}
			at, err := f.FindPlace(cmd.Context(), args[0])
			if err != nil {
				return err
			}
			return withStore(cmd, folder, false, func(s *catalog.Store) error {
				d, err := s.Depth(cmd.Context(), at.RA, at.Dec, filter, mag)
				if err != nil {
					return err
				}
				fmt.Fprint(cmd.ErrOrStderr(), d.Describe())
				if to == "" {
					return form.Encode(cmd.OutOrStdout(), d.Sheet())
				}
				return form.Write(to, d.Sheet())
			})
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&filter, "filter", "", "only frames of this filter")
	flags.Float64Var(&mag, "mag", mag, "magnitude of a source in question")
	flags.StringVar(&format, "format", "csv", "format: "+strings.Join(catalog.FormatNames(), ", "))
	flags.StringVar(&to, "out", "", "file to write")
	return cmd
}
