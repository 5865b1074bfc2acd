package survey

import (
	"errors"
	"fmt"
	"io"
	"math"
	"strings"

	"nightsift/align"
	"nightsift/internal/astro"
	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
)

// FramesIn lists the frames in files and folders, as a run would.
func FramesIn(paths []string, c Config) ([]string, error) {
	k, err := c.LoadKeywords()
	if err != nil {
		return nil, &ConfigError{err.Error()}
	}
	return ExpandFrames(paths, k)
}

// DescribeFrame writes in plain words what is understood of a frame, and
// whether it could be searched as far as it shows by itself. ok is false when a
// run would set it aside.
func DescribeFrame(w io.Writer, path string, c Config) (ok bool, err error) {
	k, err := c.LoadKeywords()
	if err != nil {
		return false, &ConfigError{err.Error()}
	}
	fmt.Fprintln(w, path)
	line := func(name, format string, args ...any) {
		fmt.Fprintf(w, "  %-12s %s\n", name, fmt.Sprintf(format, args...))
	}
	refused := func(err error) (bool, error) {
		var p *frame.Problem
		if !errors.As(err, &p) {
			return false, err
		}
		line("set aside", "%s: %s", p.Slug, p.Detail)
		return false, nil
	}
	if f, err := fits.Open(path); err == nil {
		var parts []string
		for i := range f.HDUs() {
			h := &f.HDUs()[i]
			name := h.Name
			if name == "" {
				name = fmt.Sprint(h.Index)
			}
			if h.Width > 0 {
				name += fmt.Sprintf(" (%d×%d)", h.Width, h.Height)
			}
			parts = append(parts, name)
		}
		f.Close()
		line("HDUs", "%s", strings.Join(parts, ", "))
	}
	f, err := load.Frame(path, k)
	if err != nil {
		return refused(err)
	}
	line("image", "%d × %d px, named %s", f.Image.Width, f.Image.Height, f.Name)
	m := f.Meta
	value := func(name, key, unit string, v float64, missing string) {
		if math.IsNaN(v) {
			line(name, "unknown: %s", missing)
		} else {
			line(name, "%g %s (%s)", v, unit, m.Origin[key])
		}
	}
	text := func(name, key, v, missing string) {
		if v == "" {
			line(name, "unknown: %s", missing)
		} else {
			line(name, "%s (%s)", v, m.Origin[key])
		}
	}
	text("field", "field", m.Field, "in a survey no reference can be chosen")
	text("filter", "filter", m.Filter, "any reference is accepted")
	if math.IsNaN(m.MidMJD) {
		line("time", "unknown: the frame counts as undated")
	} else {
		line("time", "%s UTC, mid-exposure (%s); night of %s", astro.MJDToISO(m.MidMJD), m.Origin["mid_mjd"], astro.NightOf(m.MidMJD, c.Survey.LongitudeDeg))
	}
	value("exposure", "exposure", "s", m.Exposure, "nothing depends on it")
	value("gain", "gain", "electron per count", m.Gain, "noise is measured from the pixels")
	value("read noise", "read_noise", "electron", m.ReadNoise, "noise is measured from the pixels")
	value("saturation", "saturation", "count", m.Saturation, "taken from the pixels")
	value("zero point", "zero_point", "mag", m.ZeroPoint, "the reference's serves, else there are no magnitudes")
	flagged := map[frame.Flag]int{}
	for _, b := range f.Flags.Bits {
		if b != 0 {
			for _, n := range frame.FlagNames {
				if b&n.Bit != 0 {
					flagged[n.Bit]++
				}
			}
		}
	}
	var parts []string
	for _, n := range frame.FlagNames {
		if flagged[n.Bit] > 0 {
			parts = append(parts, fmt.Sprintf("%s %d", n.Name, flagged[n.Bit]))
		}
	}
	if len(parts) > 0 {
		line("flagged", "%s px", strings.Join(parts, ", "))
	}
	if f.WCS == nil {
		line("sky place", "unknown: %s", orElse(m.Origin["wcs"], "no world coordinates in the header; the star pattern decides"))
	} else if ra, dec, err := f.WCS.PixelToSky(float64(f.Image.Width+1)/2, float64(f.Image.Height+1)/2); err == nil {
		line("sky place", "centre at RA %.5f°, Dec %+.5f°; %.4f arcsec per px", ra, dec, f.WCS.PixelScale())
	}
	p, err := align.Prepare(f, c.stages(1).align)
	if err != nil {
		return refused(err)
	}
	line("sky", "%.5g count, noise of a pixel %.4g count", p.Background.MedianSky, p.Background.MedianNoise)
	clean := 0
	for i := range p.Stars.Stars {
		if p.Stars.Stars[i].Clean {
			clean++
		}
	}
	line("stars", "%d, of which %d clean; FWHM %.2f px", len(p.Stars.Stars), clean, p.Stars.FWHM)
	return true, nil
}

func orElse(s, other string) string {
	if s == "" {
		return other
	}
	return s
}
