package main

import (
	"fmt"
	"io"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"nightsift/catalog"
	"nightsift/internal/astro"
	"nightsift/internal/crossmatch"
	"nightsift/internal/lightcurve"
	"nightsift/internal/supernova"
)

func newLightcurve(*output) *cobra.Command {
	var folder, to, format, plot, baseline string
	var bands []string
	var fit bool
	cfg, model := lightcurve.DefaultConfig(), supernova.DefaultConfig()
	cmd := &cobra.Command{
		Use:   "lightcurve ID|RA,DEC",
		Short: "Measure the brightness at one place on every difference frame",
		Long: `Measure the brightness at one fixed place on all difference frames of a survey,
whether anything was detected there or not. The place is an object of the
catalogue, a candidate, or right ascension and declination (degrees, or hours
and degrees with colons).

Each frame gives a flux with its error, a magnitude or an upper limit, and where
it cannot be measured the reason. The mean flux of quiet nights well before the
first detection is taken off, by filter and reference; --baseline names other
dates, or none. With --fit the template of a type Ia supernova is fitted, with
time dilation but without K-corrections; the redshift is the one given, else that
of the host. What the user's catalogues have at the place is told as well.`,
		Example: `  nightsift lightcurve 148.2703,-8.4034 --survey my-survey --out sn.csv --plot sn.png --fit`,
		Args:    cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			f, err := openSurvey(folder)
			if err != nil {
				return err
			}
			form, err := catalog.FindFormat(format)
			if err != nil {
				return usagef("--format: %v", err)
			}
			switch {
			case to == "" && !form.Text:
				return usagef("--format %s needs --out: it is not text", format)
			case plot != "" && !slices.Contains(lightcurve.PlotFormats, strings.ToLower(filepath.Ext(plot))):
				return usagef("--plot %s: its ending must be one of %s", plot, strings.Join(lightcurve.PlotFormats, ", "))
			case !(model.Redshift >= 0 && model.Redshift <= 2):
				return usagef("--redshift %v: want 0 to 2", model.Redshift)
			}
			if err := parseBaseline(&cfg, baseline); err != nil {
				return err
			}
			if err := parseBands(&model, bands); err != nil {
				return err
			}
			at, err := f.FindPlace(cmd.Context(), args[0])
			if err != nil {
				return err
			}
			curve, err := f.LightCurve(cmd.Context(), at, cfg, runtime.GOMAXPROCS(0))
			if err != nil {
				return err
			}
			// A catalogue that cannot be read is told at the end: the light curve is there.
			known, unknown := f.Known(at, curve.Middle())
			model.Cosmology = f.Config.Universe()
			if z := crossmatch.HostRedshift(known); model.Redshift == 0 && z <= 2 {
				model.Redshift = z
			}
			var result *supernova.Result
			var lines []lightcurve.Line
			if fit {
				r := curve.Fit(model)
				result, lines = &r, lightcurve.Lines(&r)
			}
			var about io.Writer = os.Stderr
			if to == "" {
				if err := form.Encode(cmd.OutOrStdout(), curve.Sheet()); err != nil {
					return err
				}
			} else {
				if err := form.Write(to, curve.Sheet()); err != nil {
					return err
				}
				about = cmd.OutOrStdout()
			}
			if plot != "" {
				if err := curve.WritePlot(plot, lines); err != nil {
					return err
				}
			}
			curve.Describe(about, known, result, model)
			return unknown
		},
	}
	flags := cmd.Flags()
	flags.StringVar(&folder, "survey", "", "survey folder")
	flags.StringVar(&to, "out", "", "file to write; else csv goes to stdout")
	flags.StringVar(&format, "format", "csv", "format: "+strings.Join(catalog.FormatNames(), ", "))
	flags.StringVar(&plot, "plot", "", "plot to write, its ending .png or .svg")
	flags.StringVar(&baseline, "baseline", "auto", "nights without the source: FROM,TO as dates or MJD, auto, or none")
	flags.BoolVar(&fit, "fit", false, "fit the template of a type Ia supernova")
	flags.Float64Var(&model.Redshift, "redshift", 0, "redshift for the fit; 0: that of the host among the user's catalogues, else unknown")
	flags.StringArrayVar(&bands, "band", nil, "FILTER=B or FILTER=V: which template a filter takes; B if not named")
	return cmd
}

// parseBaseline reads --baseline.
func parseBaseline(cfg *lightcurve.Config, text string) error {
	switch text {
	case "auto":
		return nil
	case "none":
		cfg.NoBaseline = true
		return nil
	}
	from, to, ok := strings.Cut(text, ",")
	if !ok {
		return usagef("--baseline %s: want FROM,TO, auto or none", text)
	}
	for _, d := range []struct {
		text string
		dst  *float64
	}{{from, &cfg.BaselineFrom}, {to, &cfg.BaselineTo}} {
		v, err := strconv.ParseFloat(strings.TrimSpace(d.text), 64)
		if err != nil {
			if v, err = astro.ParseDate(d.text); err != nil {
				return usageError{fmt.Errorf("--baseline %s: %w", text, err)}
			}
		}
		*d.dst = v
	}
	if !(cfg.BaselineTo > cfg.BaselineFrom) {
		return usagef("--baseline %s: it ends before it begins", text)
	}
	return nil
}

// parseBands reads --band.
func parseBands(model *supernova.Config, list []string) error {
	model.Bands = map[string]supernova.Band{}
	for _, text := range list {
		filter, band, ok := strings.Cut(text, "=")
		k := slices.Index(supernova.Bands, band)
		if !ok || k < 0 {
			return usagef("--band %s: want FILTER=%s", text, strings.Join(supernova.Bands, " or FILTER="))
		}
		model.Bands[filter] = supernova.Band(k)
	}
	return nil
}
