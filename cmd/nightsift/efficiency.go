package main

import (
	"fmt"
	"io"
	"math"
	"path/filepath"
	"strings"
	"time"

	"github.com/spf13/cobra"

	"nightsift/internal/efficiency"
	"nightsift/internal/survey"
)

func newEfficiency(*output) *cobra.Command {
	var reference, dir, folder, night, where string
	var count int
	var seed uint64
	var distance float64
	var shared bool
	cmd := &cobra.Command{
		Use:   "efficiency [FRAME|FOLDER]...",
		Short: "Put artificial sources into frames and measure which of them are found",
		Long: `Put artificial point sources into copies of real frames, search the copies, and
report which part comes back: against magnitude, signal to noise, brightness of
the host and place on the chip, with the limits at which half and nine tenths
are found. The rest is told apart: masked, not detected, rejected as not real,
confused with something else.

Every stage is repeated on frames with sources in them. With --shared the
search of the frame itself is used for what does not depend on the sources; it
is many times faster, and "run --efficiency" works so.

Sources are drawn by --seed: equal seeds give equal sources.`,
		Example: `  nightsift efficiency new.fits --reference deep.fits --count 1000 --out efficiency
  nightsift efficiency --survey my-survey --night 2026-11-30 --where galaxies --out efficiency`,
		Args: cobra.ArbitraryArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			c := efficiency.DefaultConfig()
			c.Count, c.Seed, c.Where, c.CoreDistance = count, seed, efficiency.Where(where), distance
			if err := c.Check(); err != nil {
				return usageError{err}
			}
			if dir == "" {
				return usagef("efficiency needs --out")
			}
			m := survey.Injection{Frames: args, Reference: reference, Out: dir, Config: survey.DefaultConfig(), Settings: c, Shared: shared, Version: version,
				Observe: func(m efficiency.Measured, done, total int) { printMeasured(cmd.OutOrStdout(), &m) }}
			fmt.Fprintf(cmd.OutOrStdout(), "seed %d\n", seed)
			var frames []efficiency.Measured
			var err error
			if folder == "" {
				if len(args) == 0 || reference == "" {
					return usagef("loose frames need FRAME and --reference; a survey needs --survey")
				}
				if night != "" {
					return usagef("--night goes with --survey")
				}
				frames, err = survey.MeasureLoose(cmd.Context(), m)
			} else {
				if len(args) > 0 || reference != "" {
					return usagef("FRAME and --reference do not go with --survey: the folder knows its own")
				}
				if _, bad := time.Parse(time.DateOnly, night); night != "" && bad != nil {
					return usagef("--night %s: want YYYY-MM-DD", night)
				}
				f, open := survey.OpenFolder(folder)
				if open != nil {
					return open
				}
				frames, err = f.MeasureNights(cmd.Context(), m, night)
			}
			if err != nil {
				return err
			}
			return concludeEfficiency(cmd.OutOrStdout(), frames, dir)
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&reference, "reference", "", "deep reference for loose frames")
	flags.StringVar(&dir, "out", "", "folder for tables and figures")
	flags.StringVar(&folder, "survey", "", "survey folder: its searched frames")
	flags.StringVar(&night, "night", "", "only this night, YYYY-MM-DD")
	flags.IntVar(&count, "count", efficiency.DefaultConfig().Count, "sources in each frame; many are put in by several rounds")
	flags.Uint64Var(&seed, "seed", efficiency.DefaultConfig().Seed, "chooses places, magnitudes and photon noise")
	flags.StringVar(&where, "where", string(efficiency.OnSky), "places: sky, galaxies (following their light) or cores (at --core-distance)")
	flags.Float64Var(&distance, "core-distance", efficiency.DefaultConfig().CoreDistance, "px from the centres of galaxies, with --where cores")
	flags.BoolVar(&shared, "shared", false, "solve the subtraction once for each frame instead of anew with the sources")
	cmd.AddCommand(newControl())
	return cmd
}

func newControl() *cobra.Command {
	var folder, dir string
	s := survey.DefaultControlSettings()
	cmd := &cobra.Command{
		Use:   "control",
		Short: "Control times of a survey and the number of type Ia supernovae to expect",
		Long: `From the dates of the searched frames and the efficiency measured on each, say
for how long each field was watched for supernovae of type Ia, against redshift,
and how many are expected for a rate. Frames without a measured efficiency count
with a threshold of five sigma and are named as such.

The template rises in about 20 days; slower ones are brighter; there is no dust
and no K-correction: every filter sees the light curve in B. Filters are separate
watches of one sky, so their events must not be added.`,
		Example: `  nightsift efficiency control --survey my-survey --redshift 0.15 --out control
  nightsift efficiency control --survey my-survey --galaxies 200 --galaxy-rate 0.002 --redshift 0.02`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, args []string) error {
			if folder == "" {
				return usagef("control needs --survey")
			}
			if err := s.Check(); err != nil {
				return usageError{err}
			}
			f, err := survey.OpenFolder(folder)
			if err != nil {
				return err
			}
			watched, err := f.Watched(s.Needed)
			if err != nil {
				return err
			}
			if len(watched) == 0 {
				return usagef("%s has no searched frames; nightsift run --survey searches them", folder)
			}
			w := cmd.OutOrStdout()
			fmt.Fprintf(w, "type Ia, peak %.2f mag, stretch 1 ± %g, found on %d frames or more; %s\n", s.Peak, s.StretchSpread, s.Needed, s.Cosmology)
			var list []survey.Expected
			for _, field := range watched {
				e := field.Expect(&s)
				list = append(list, e)
				printControl(w, &e, &s)
			}
			if dir == "" {
				return nil
			}
			fmt.Fprintln(w, filepath.Join(dir, survey.ControlTimeCSV))
			return survey.WriteControlTimes(dir, list, &s)
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&dir, "out", "", "folder for the table; without it only the summary is printed")
	flags.Float64Var(&s.Farthest, "redshift", s.Farthest, "out to which the table goes and events are counted")
	flags.Float64Var(&s.Peak, "peak", s.Peak, "absolute magnitude at the maximum, stretch 1")
	flags.Float64Var(&s.StretchSpread, "stretch-spread", s.StretchSpread, "spread of the stretch of the light curves about 1")
	flags.IntVar(&s.Needed, "needed", s.Needed, "frames that must find an object")
	flags.Float64Var(&s.Rate, "rate", s.Rate, "events for each comoving Mpc³ and year")
	flags.Float64Var(&s.Evolution, "rate-power", s.Evolution, "power of 1+z with which the rate grows")
	flags.Float64Var(&s.Galaxies, "galaxies", s.Galaxies, "galaxies in each field, all at --redshift, for the second number")
	flags.Float64Var(&s.GalaxyRate, "galaxy-rate", s.GalaxyRate, "events for each galaxy and year; one in several hundred years in one like ours")
	flags.Float64Var(&s.Cosmology.H0, "h0", s.Cosmology.H0, "Hubble constant, km/s/Mpc")
	flags.Float64Var(&s.Cosmology.OmegaMatter, "omega-matter", s.Cosmology.OmegaMatter, "density of matter; the universe is flat")
	return cmd
}

// printControl prints what a field's watch amounts to.
func printControl(w io.Writer, e *survey.Expected, s *survey.ControlSettings) {
	fmt.Fprintf(w, "%s %s: %d frames", e.Field, e.Filter, e.Frames)
	if e.Assumed > 0 {
		fmt.Fprintf(w, " (%d without measured efficiency: five sigma taken)", e.Assumed)
	}
	if e.Unknown > 0 {
		fmt.Fprintf(w, ", %d left out without date or limit", e.Unknown)
	}
	last := len(e.Days) - 1
	fmt.Fprintf(w, "; watched for %.1f d at z = %.3g, %.1f d at z = %.3g", e.Days[0], e.Redshifts[0], e.Days[last], e.Redshifts[last])
	if !math.IsNaN(e.Half) {
		fmt.Fprintf(w, ", half of that beyond z = %.3g", e.Half)
	}
	if math.IsNaN(e.Events) {
		fmt.Fprint(w, "; area on the sky unknown")
	} else {
		fmt.Fprintf(w, "; %.3g events expected on %.4g square degrees", e.Events, e.Area)
	}
	if s.Galaxies > 0 {
		fmt.Fprintf(w, "; %.3g in %g galaxies at z = %.3g", e.InHosts, s.Galaxies, s.Farthest)
	}
	fmt.Fprintln(w)
}

// printMeasured prints the outcome of one frame.
func printMeasured(w io.Writer, m *efficiency.Measured) {
	if m.Result == nil {
		fmt.Fprintf(w, "%s: not measured, %s: %s\n", m.Frame, m.Status, m.Detail)
		return
	}
	count := efficiency.Count(m.Injections)
	fmt.Fprintf(w, "%s: %d of %d found", m.Frame, count[efficiency.Found], len(m.Injections))
	for _, f := range efficiency.Fates[1:] {
		fmt.Fprintf(w, ", %d %s", count[f], strings.ReplaceAll(string(f), "_", " "))
	}
	if c := m.Curve; c != nil {
		unit := "mag"
		if !m.HasMagnitudes {
			unit = "mag of one count"
		}
		fmt.Fprintf(w, "; half at %s %s", limitText(c.Mag50, c.Mag50Err), unit)
		fmt.Fprintf(w, ", nine tenths at %s", limitText(c.Mag90, c.Mag90Err))
		if !math.IsNaN(m.Limit5) {
			fmt.Fprintf(w, " (5σ on empty sky: %.2f)", m.Limit5)
		}
	}
	fmt.Fprintln(w)
}

func limitText(m, err float64) string {
	if math.IsNaN(m) {
		return "no magnitude"
	}
	return fmt.Sprintf("%.3f ± %.3f", m, err)
}

// concludeEfficiency prints the sum of all frames.
func concludeEfficiency(w io.Writer, frames []efficiency.Measured, dir string) error {
	var all []efficiency.Injection
	missing := 0
	for _, f := range frames {
		if f.Result == nil {
			missing++
			continue
		}
		all = append(all, f.Injections...)
	}
	if c := efficiency.Fit(all); len(frames)-missing > 1 && c.Relative != nil {
		fmt.Fprintf(w, "all together: half at %s mag fainter than 5σ on empty sky, nine tenths at %s\n",
			limitText(c.Relative.Mag50, c.Relative.Mag50Err), limitText(c.Relative.Mag90, c.Relative.Mag90Err))
	}
	fmt.Fprintln(w, filepath.Join(dir, "efficiency-magnitude.png"))
	if missing > 0 {
		return errSetAside
	}
	return nil
}
