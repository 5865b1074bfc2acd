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
	"nightsift/internal/frame/noise"
	"nightsift/internal/picture"
)

// FramesIn lists the frames in files and folders, as a run would.
func FramesIn(paths []string, c Config) ([]string, error) {
	k, err := c.LoadKeywords()
	if err != nil {
		return nil, &ConfigError{err.Error()}
	}
	return ExpandFrames(paths, k)
}

// pictureSide is the longest side of a picture of a frame, px.
const pictureSide = 1200

// DescribeFrame writes in plain words what is understood of a frame, where each
// value comes from, what was guessed, what is missing and what that costs, and
// whether the frame could be searched as far as it shows by itself. With a path
// for a picture it writes one as PNG, as soon as there are pixels. ok is false
// when a run would set the frame aside.
func DescribeFrame(w io.Writer, path, picturePath string, c Config) (ok bool, err error) {
	k, err := c.LoadKeywords()
	if err != nil {
		return false, &ConfigError{err.Error()}
	}
	d := &description{w: w}
	fmt.Fprintln(w, path)
	warnings := d.contents(path)
	f, report, err := load.Read(path, k)
	var p *frame.Problem
	if err != nil && !errors.As(err, &p) {
		return false, err
	}
	if f != nil {
		d.line("image", "%d × %d px, named %s", f.Image.Width, f.Image.Height, f.Name)
		d.values(f, report, c.Survey.LongitudeDeg)
		d.planes(f, report)
		d.sky(f, report)
	}
	for _, text := range warnings {
		d.line("note", "%s", text)
	}
	if report != nil {
		d.remarks(report, "header")
		if f == nil {
			for _, r := range report.Remarks {
				d.remarks(report, r.About)
			}
		}
	}
	if p != nil {
		d.line("set aside", "%s: %s", p.Slug, p.Detail)
		return false, nil
	}
	if picturePath != "" {
		scale, low, high, err := picture.WriteFrame(picturePath, f.Image, pictureSide)
		if err != nil {
			return false, err
		}
		d.line("picture", "%s: one pixel is %.3g of the frame; black %.5g, white %.5g count; row 1 is at the bottom", picturePath, scale, low, high)
	}
	return d.search(f, c)
}

// description writes lines and remembers which remarks were made.
type description struct {
	w    io.Writer
	said map[string]bool
}

func (d *description) line(name, format string, args ...any) {
	fmt.Fprintf(d.w, "  %-12s %s\n", name, fmt.Sprintf(format, args...))
}

// remarks writes the remarks on one value below it, each once.
func (d *description) remarks(report *load.Report, about string) {
	if d.said == nil {
		d.said = map[string]bool{}
	}
	for _, r := range report.Remarks {
		if r.About == about && !d.said[about+r.Text] {
			d.said[about+r.Text] = true
			d.line("", "note: %s", r.Text)
		}
	}
}

// contents lists the HDUs. It returns what was malformed.
func (d *description) contents(path string) (warnings []string) {
	f, err := fits.OpenHeaders(path)
	if err != nil {
		return nil // reading will say why
	}
	var parts []string
	for i := range f.HDUs() {
		h := &f.HDUs()[i]
		if i == 40 {
			parts = append(parts, fmt.Sprintf("… (%d in all)", len(f.HDUs())))
			break
		}
		name := h.Name
		if name == "" {
			name = fmt.Sprint(h.Index)
		}
		if h.Version != 1 {
			name += fmt.Sprintf(",%d", h.Version)
		}
		if h.Width > 0 {
			size := fmt.Sprintf("%d×%d", h.Width, h.Height)
			if h.Depth > 1 {
				size += fmt.Sprintf("×%d", h.Depth)
			}
			name += fmt.Sprintf(" (%s, %s%s)", size, pixelType(h.BitPix), map[bool]string{true: " in tiles"}[h.Kind == fits.CompressedImage])
		}
		parts = append(parts, name)
	}
	d.line("HDUs", "%s", strings.Join(parts, ", "))
	warnings = append(warnings, f.Warnings...)
	for i := range f.HDUs() {
		if f.Selected >= 0 && i != f.Selected && i != 0 {
			continue
		}
		for _, text := range f.HDUs()[i].Header.Warnings() {
			if len(warnings) == 20 {
				return append(warnings, "and more")
			}
			warnings = append(warnings, fmt.Sprintf("HDU %d, %s", i, text))
		}
	}
	return warnings
}

func pixelType(bitpix int) string {
	if bitpix < 0 {
		return fmt.Sprintf("%d-bit floats", -bitpix)
	}
	return fmt.Sprintf("%d-bit integers", bitpix)
}

// values tells the header values, each with its origin, and what it costs when
// one is missing.
func (d *description) values(f *frame.Frame, report *load.Report, longitude float64) {
	m := f.Meta
	value := func(name, key, unit string, v float64, missing string) {
		if math.IsNaN(v) {
			d.line(name, "unknown: %s", missing)
		} else {
			digits := 6
			if strings.HasPrefix(m.Origin[key], "estimated") {
				digits = 3
			}
			d.line(name, "%s (%s)", strings.TrimSpace(fmt.Sprintf("%.*g %s", digits, v, unit)), m.Origin[key])
		}
		d.remarks(report, key)
	}
	text := func(name, key, v, missing string) {
		if v == "" {
			d.line(name, "unknown: %s", missing)
		} else {
			d.line(name, "%s (%s)", v, m.Origin[key])
		}
		d.remarks(report, key)
	}
	text("field", "field", m.Field, "in a survey no reference can be chosen; name the keyword under [keywords]")
	text("filter", "filter", m.Filter, "any reference is accepted, also one of another filter")
	if math.IsNaN(m.MidMJD) {
		d.line("time", "unknown: the frame counts as undated; no light curves, no proper motions of its stars")
	} else {
		d.line("time", "%s UTC, mid-exposure (%s); night of %s", astro.MJDToISO(m.MidMJD), m.Origin["mid_mjd"], astro.NightOf(m.MidMJD, longitude))
	}
	d.remarks(report, "mid_mjd")
	value("exposure", "exposure", "s", m.Exposure, "the middle of the exposure cannot be told from its start")
	value("airmass", "airmass", "", m.Airmass, "nothing in the search depends on it")
	d.line("pixels in", "%s", unitWords(report))
	estimate := report.Noise
	missing := "the noise of the sky is measured from the pixels, that of stars taken from it as if there were no read noise"
	if estimate != nil && math.IsNaN(m.Gain) {
		missing += "; it cannot be estimated: " + estimate.Why
		if least := estimate.GainFor(0); least > 0 {
			missing += fmt.Sprintf(" (if no sky was subtracted it is %.3g without read noise, %.3g with 5 electrons, %.3g with 15)", least, estimate.GainFor(5), estimate.GainFor(15))
		}
	}
	value("gain", "gain", "electron per count", m.Gain, missing)
	d.agreement(f, report)
	value("read noise", "read_noise", "electron", m.ReadNoise, "the noise of the sky is measured from the pixels")
	value("saturation", "saturation", "count", m.Saturation, "no pixel reaches the end of its type and no star ends in a plateau: nothing seems saturated")
	value("zero point", "zero_point", "mag of one count", m.ZeroPoint, "the reference's serves, or your catalogue of stars; without both there are no magnitudes")
}

func unitWords(r *load.Report) string {
	if r.UnitText == "" {
		return "counts (guessed: there is no BUNIT)"
	}
	words := map[load.PixelUnit]string{load.Counts: "counts", load.Electrons: "electrons", load.OtherUnits: "another unit than counts or electrons"}[r.Unit]
	if r.Rate {
		words += " per second"
	}
	return fmt.Sprintf("%s (BUNIT = %q)", words, r.UnitText)
}

// agreement compares a stated gain with what the pixels say.
func (d *description) agreement(f *frame.Frame, report *load.Report) {
	if report.Noise != nil || math.IsNaN(f.Meta.Gain) {
		return // nothing independent
	}
	n := noise.Measure(f.Image, f.Flags)
	if math.IsNaN(n.Gain) {
		if strings.Contains(n.Why, "not white") {
			d.line("", "note: %s; gain and read noise say nothing about it, it is measured instead", n.Why)
		}
		return
	}
	off := math.Abs(n.Gain-f.Meta.Gain) / math.Hypot(n.GainErr, 0.03*f.Meta.Gain)
	if off > 4 {
		d.line("", "WRONG? the noise against the level of light says %.3g ± %.2g: fluxes of bright sources would get wrong errors; check the keyword, or that the pixels are counts", n.Gain, n.GainErr)
	} else {
		d.line("", "the noise against the level of light says %.3g ± %.2g: in agreement", n.Gain, n.GainErr)
	}
}

// planes tells of flags and extensions.
func (d *description) planes(f *frame.Frame, report *load.Report) {
	for _, what := range []string{"variance", "error", "mask"} {
		if from, ok := f.Meta.Origin[what]; ok {
			d.line(what, "extension %s", from)
		}
		d.remarks(report, what)
	}
	var flagged [16]int
	for _, b := range f.Flags.Bits {
		if b == 0 {
			continue
		}
		for n, name := range frame.FlagNames {
			if b&name.Bit != 0 {
				flagged[n]++
			}
		}
	}
	var parts []string
	for n, name := range frame.FlagNames {
		if flagged[n] > 0 {
			parts = append(parts, fmt.Sprintf("%s %d", name.Name, flagged[n]))
		}
	}
	if len(parts) > 0 {
		d.line("flagged", "%s px", strings.Join(parts, ", "))
	}
}

// sky tells where the frame points.
func (d *description) sky(f *frame.Frame, report *load.Report) {
	if f.WCS == nil {
		why := "no world coordinates in the header"
		if broken, ok := strings.CutPrefix(f.Meta.Origin["wcs"], "ignored: "); ok {
			why = "the world coordinates in the header cannot be used (" + strings.TrimPrefix(broken, "wcs: ") + ")"
		}
		d.line("sky place", "unknown: %s; the star pattern decides", why)
		if !math.IsNaN(report.RA) {
			d.line("", "the header points at RA %.5f°, Dec %+.5f° (%s)", report.RA, report.Dec, report.Origin["pointing"])
		}
		if !math.IsNaN(report.PixelScale) {
			d.line("", "%.4g arcsec per px (%s)", report.PixelScale, report.Origin["pixel_scale"])
		}
		return
	}
	x, y := float64(f.Image.Width+1)/2, float64(f.Image.Height+1)/2
	ra, dec, err := f.WCS.PixelToSky(x, y)
	if err != nil {
		d.line("sky place", "the world coordinates do not reach the middle of the frame: %v", err)
		return
	}
	d.line("sky place", "centre at RA %.5f°, Dec %+.5f°; %.4f arcsec per px", ra, dec, f.WCS.PixelScale())
	angle, parity, err := f.WCS.Orientation(x, y)
	if err != nil {
		return
	}
	if parity < 0 {
		d.line("", "up is at position angle %.1f°; mirrored: with north up, east is to the right", angle)
	} else {
		d.line("", "up is at position angle %.1f°; with north up, east is to the left", angle)
	}
	if near := astro.Separation(ra, dec, report.RA, report.Dec); near > 1 {
		d.line("", "note: the keywords %s point %.1f° away from there", report.Origin["pointing"], near)
	}
}

// search measures what a run would need: sky and stars.
func (d *description) search(f *frame.Frame, c Config) (ok bool, err error) {
	p, err := align.Prepare(f, c.stages(1).align)
	if err != nil {
		var problem *frame.Problem
		if !errors.As(err, &problem) {
			return false, err
		}
		d.line("set aside", "%s: %s", problem.Slug, problem.Detail)
		return false, nil
	}
	d.line("sky", "%.5g count, noise of a pixel %.4g count", p.Background.MedianSky, p.Background.MedianNoise)
	d.line("", "%s: %s", map[string]string{
		"extension": "variance taken from the extension", "model": "variance taken from the model", "measured": "variance taken as measured",
	}[p.Variance.Source], p.Variance.Reason)
	clean := 0
	for i := range p.Stars.Stars {
		if p.Stars.Stars[i].Clean {
			clean++
		}
	}
	d.line("stars", "%d, of which %d clean; FWHM %.2f px", len(p.Stars.Stars), clean, p.Stars.FWHM)
	return true, nil
}

func orElse(s, other string) string {
	if s == "" {
		return other
	}
	return s
}
