package lightcurve

import (
	"fmt"
	"io"
	"math"

	"nightsift/internal/astro"
	"nightsift/internal/crossmatch"
	"nightsift/internal/robust"
	"nightsift/internal/supernova"
)

// Fit fits the template of a type Ia supernova to all points with a flux. The
// error of the baseline is taken for that of the filter's zero; with several
// references in a filter, each with its own zero, it widens each point.
func (c *Curve) Fit(cfg supernova.Config) supernova.Result {
	cfg.ZeroPoint = FluxZeroPoint
	cfg.Offset = map[string]float64{}
	references := map[string]string{} // by filter; empty for several
	for i := range c.Points {
		if p := &c.Points[i]; p.scaled() {
			if r, there := references[p.Filter]; there && r != p.Reference {
				references[p.Filter] = ""
			} else {
				references[p.Filter] = p.Reference
			}
		}
	}
	var list []supernova.Observation
	for i := range c.Points {
		p := &c.Points[i]
		if !p.scaled() {
			continue
		}
		o := supernova.Observation{MJD: p.MidMJD, Filter: p.Filter, Flux: p.Flux, Err: p.FluxErr}
		if references[p.Filter] == p.Reference {
			cfg.Offset[p.Filter] = max(cfg.Offset[p.Filter], p.BaselineErr)
		} else { // each reference has a zero of its own: no common offset
			o.Err = math.Hypot(o.Err, p.BaselineErr)
		}
		list = append(list, o)
	}
	return supernova.Fit(list, cfg)
}

// Lines are the fitted courses of light, for a plot; none where the fit found
// no date.
func Lines(r *supernova.Result) []Line {
	if r.MJD != r.MJD {
		return nil
	}
	var lines []Line
	for _, p := range r.Peaks {
		lines = append(lines, Line{
			Filter: p.Filter, From: r.MJD - 30, To: r.MJD + 80,
			Flux: func(mjd float64) float64 { return r.Flux(p.Filter, mjd) },
		})
	}
	return lines
}

// Middle returns a time [MJD] in the middle of the points, NaN without any.
func (c *Curve) Middle() float64 {
	var times []float64
	for i := range c.Points {
		times = append(times, c.Points[i].MidMJD)
	}
	return robust.Median(robust.DropNaN(times))
}

// Describe writes in words what was measured, what was taken off, what is known of
// the place, and, if fit is not nil, what the template says.
func (c *Curve) Describe(w io.Writer, known []crossmatch.Match, fit *supernova.Result, cfg supernova.Config) {
	counts := map[Status]int{}
	detected := 0
	for i := range c.Points {
		counts[c.Points[i].Status]++
		if c.Points[i].Mag == c.Points[i].Mag {
			detected++
		}
	}
	name := c.Name
	if name != "" {
		name += ", "
	}
	fmt.Fprintf(w, "%sright ascension %.6f, declination %+.6f: %d frames measured, detected on %d", name, c.RA, c.Dec, counts[Measured], detected)
	for _, s := range []Status{Outside, Masked, Missing} {
		if counts[s] > 0 {
			fmt.Fprintf(w, "; %s: %d", s, counts[s])
		}
	}
	fmt.Fprintln(w)
	for _, b := range c.Baselines {
		fmt.Fprintf(w, "baseline, filter %s, reference %s: flux %.4g ± %.2g from %d frames, %s to %s\n", b.Filter, b.Reference, b.Flux, b.Err, b.Frames, day(b.FromMJD), day(b.ToMJD))
	}
	for _, n := range c.Notes {
		fmt.Fprintln(w, "note:", n)
	}
	for _, m := range known {
		fmt.Fprintf(w, "%s: %s %s at %.2f arcsec (it is %.2f east, %.2f north of that)", m.Catalogue, m.Kind, m.Name, m.Distance, m.East, m.North)
		if m.LightRadii == m.LightRadii {
			fmt.Fprintf(w, ", %.2f light radii", m.LightRadii)
		}
		if m.Mag == m.Mag {
			fmt.Fprintf(w, ", %.2f mag", m.Mag)
		}
		if m.Redshift == m.Redshift {
			fmt.Fprintf(w, ", redshift %.4f: %.2f kpc, absolute magnitude %.2f", m.Redshift, m.Kiloparsec, m.Absolute(m.Mag))
		}
		fmt.Fprintln(w)
	}
	if fit == nil {
		return
	}
	fmt.Fprintf(w, "type Ia template: %s: %s\n", fit.Verdict, fit.Reason)
	if fit.MJDErr != fit.MJDErr {
		return
	}
	fmt.Fprintf(w, "maximum         MJD %.2f ± %.2f (%s)\n", fit.MJD, fit.MJDErr, day(fit.MJD))
	for _, p := range fit.Peaks {
		if p.Mag == p.Mag {
			fmt.Fprintf(w, "  filter %-8s %.3f ± %.3f mag (template of %s, no K-correction)\n", p.Filter, p.Mag, p.MagErr, supernova.Bands[p.Band])
		}
	}
	fmt.Fprintf(w, "stretch         %.3f ± %.3f\n", fit.Stretch, fit.StretchErr)
	fmt.Fprintf(w, "decline         Δm15(B) = %.2f ± %.2f mag\n", fit.DeltaM15, fit.DeltaM15Err)
	fmt.Fprintf(w, "chi-square      %.1f for %d degrees of freedom, probability %.3g\n", fit.Chi2, fit.Degrees, fit.Probability)
	if cfg.Redshift > 0 {
		fmt.Fprintf(w, "absolute        %.2f mag at redshift %g (%s); of that decline rate %.2f mag is usual\n", fit.Absolute, cfg.Redshift, cfg.Cosmology, fit.Expected)
	} else {
		fmt.Fprintln(w, "redshift        unknown: the stretch holds the factor 1+z")
	}
}

func day(mjd float64) string {
	if math.IsNaN(mjd) || math.IsInf(mjd, 0) {
		return "?"
	}
	if iso := astro.MJDToISO(mjd); len(iso) >= 10 {
		return iso[:10]
	}
	return "?"
}
