package subtract

import (
	"fmt"
	"math"
	"strings"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/psf"
	"nightsift/internal/startable"
	"nightsift/internal/wcs"
)

// Names of the extensions of a difference file.
const (
	extDifference   = "DIFFERENCE"
	extVariance     = "VARIANCE"
	extSignificance = "SIGNIFICANCE"
	extFlags        = "FLAGS"
	extPSF          = "PSF"
	extNew          = "NEW"
	extReference    = "REFERENCE"
	extSources      = "REFERENCE_SOURCES"
)

// infoCard ties a header keyword to a field of Info.
type infoCard struct {
	key, comment string
	text         func(*Info) *string
	number       func(*Info) *float64
	count        func(*Info) *int
}

var infoCards = []infoCard{
	{key: "METHOD", comment: "how the frames were matched", text: func(i *Info) *string { return &i.Method }},
	{key: "METHWHY", comment: "why this way", text: func(i *Info) *string { return &i.MethodReason }},
	{key: "CONVOLVE", comment: "which frames were convolved", text: func(i *Info) *string { return &i.Direction }},
	{key: "CONVWHY", comment: "the measure behind it", text: func(i *Info) *string { return &i.DirectionReason }},
	{key: "KERBASIS", comment: "functions that make up the kernel", text: func(i *Info) *string { return &i.KernelBasis }},
	{key: "REFNAME", comment: "reference", text: func(i *Info) *string { return &i.ReferenceName }},
	{key: "REFSHA", comment: "SHA-256 of the reference", text: func(i *Info) *string { return &i.ReferenceChecksum }},
	{key: "NOISESRC", comment: "source of the sky variance", text: func(i *Info) *string { return &i.NoiseSource }},
	{key: "FWHMNEW", comment: "[px] FWHM of the new frame", number: func(i *Info) *float64 { return &i.FWHMNew }},
	{key: "FWHMREF", comment: "[px] FWHM of the reference on this grid", number: func(i *Info) *float64 { return &i.FWHMReference }},
	{key: "FLXSCALE", comment: "counts of the new frame per reference count", number: func(i *Info) *float64 { return &i.FluxScale }},
	{key: "SKY", comment: "[count] median sky of the new frame", number: func(i *Info) *float64 { return &i.Sky }},
	{key: "SKYNOISE", comment: "[count] white noise of a pixel", number: func(i *Info) *float64 { return &i.SkyNoise }},
	{key: "MAGZP", comment: "[mag] of one count", number: func(i *Info) *float64 { return &i.ZeroPoint }},
	{key: "ZPSOURCE", comment: "where it came from", text: func(i *Info) *string { return &i.ZeroPointSource }},
	{key: "ZPCATSHA", comment: "SHA-256 of the catalogue of stars", text: func(i *Info) *string { return &i.ZeroPointChecksum }},
	{key: "ZPERR", comment: "[mag] 1 sigma, from the catalogue's stars", number: func(i *Info) *float64 { return &i.ZeroPointErr }},
	{key: "ZPSCAT", comment: "[mag] scatter of stars beyond their errors", number: func(i *Info) *float64 { return &i.ZeroPointScatter }},
	{key: "COLTERM", comment: "coefficient of the colour", number: func(i *Info) *float64 { return &i.ColourTerm }},
	{key: "COLTERME", comment: "1 sigma; 0 for a fixed one", number: func(i *Info) *float64 { return &i.ColourTermErr }},
	{key: "NZPSTAR", comment: "stars behind MAGZP", count: func(i *Info) *int { return &i.ZeroPointStars }},
	{key: "NZPCLIP", comment: "stars left out as outliers", count: func(i *Info) *int { return &i.ZeroPointClipped }},
	{key: "MAGLIM5", comment: "[mag] 5 sigma point source", number: func(i *Info) *float64 { return &i.MagLimit5 }},
	{key: "FLXLIM5", comment: "[count] 5 sigma point source", number: func(i *Info) *float64 { return &i.FluxLimit5 }},
	{key: "ASTRMS", comment: "[px] alignment residual, each axis", number: func(i *Info) *float64 { return &i.AstrometryRMS }},
	{key: "KERCHI2", comment: "reduced chi-square of the kernel's stamps", number: func(i *Info) *float64 { return &i.KernelChi2 }},
	{key: "KERSUM", comment: "sum of the kernel, mean over the frame", number: func(i *Info) *float64 { return &i.KernelSum }},
	{key: "KERSUMSD", comment: "its relative rms over the frame", number: func(i *Info) *float64 { return &i.KernelSumRMS }},
	{key: "KERCOND", comment: "condition number of the solve", number: func(i *Info) *float64 { return &i.Condition }},
	{key: "NOISERAT", comment: "spread of SIGNIFICANCE on empty sky", number: func(i *Info) *float64 { return &i.NoiseRatio }},
	{key: "NOISESCL", comment: "scale learnt where noise is correlated", number: func(i *Info) *float64 { return &i.NoiseScale }},
	{key: "SIGMEAN", comment: "mean of SIGNIFICANCE on empty sky", number: func(i *Info) *float64 { return &i.SignificanceMean }},
	{key: "NOISEMOD", comment: "[count] noise from gain, read noise, sky", number: func(i *Info) *float64 { return &i.ModelNoise }},
	{key: "NOISEMEA", comment: "[count] noise measured from the pixels", number: func(i *Info) *float64 { return &i.MeasuredNoise }},
	{key: "JITTER", comment: "[px] shift left at bright stars", number: func(i *Info) *float64 { return &i.JitterPx }},
	{key: "SCALEERR", comment: "relative residual left at bright stars", number: func(i *Info) *float64 { return &i.ScaleError }},
	{key: "SHAPEERR", comment: "relative residual of sharp light only", number: func(i *Info) *float64 { return &i.ShapeError }},
	{key: "STARCHI2", comment: "median chi-square per pixel at bright stars", number: func(i *Info) *float64 { return &i.StarChi2 }},
	{key: "NFLXSCAL", comment: "stars behind FLXSCALE", count: func(i *Info) *int { return &i.FluxScaleStars }},
	{key: "NMATCH", comment: "stars matched", count: func(i *Info) *int { return &i.StarsMatched }},
	{key: "NPSFNEW", comment: "stars in the PSF of the new frame", count: func(i *Info) *int { return &i.StarsPSFNew }},
	{key: "NPSFREF", comment: "stars in the PSF of the reference", count: func(i *Info) *int { return &i.StarsPSFRef }},
	{key: "NSTAMP", comment: "stamps in the kernel's solve", count: func(i *Info) *int { return &i.KernelStamps }},
	{key: "NCLIP", comment: "stamps clipped", count: func(i *Info) *int { return &i.KernelClipped }},
	{key: "KERORDER", comment: "spatial order of the kernel", count: func(i *Info) *int { return &i.KernelOrder }},
	{key: "KERTERMS", comment: "unknowns of the solve", count: func(i *Info) *int { return &i.KernelTerms }},
	{key: "NPROBE", comment: "bright stars probed", count: func(i *Info) *int { return &i.StarsProbed }},
	{key: "NHIT", comment: "particle hits found on the new frame", count: func(i *Info) *int { return &i.Hits }},
	{key: "NHITPIX", comment: "their pixels", count: func(i *Info) *int { return &i.HitPixels }},
	{key: "NTRAIL", comment: "trails of satellites or aircraft", count: func(i *Info) *int { return &i.Trails }},
	{key: "NBADLINE", comment: "bad columns and rows found", count: func(i *Info) *int { return &i.BadLines }},
	{key: "NUSABLE", comment: "pixels searched", count: func(i *Info) *int { return &i.UsablePixels }},
}

// source ends the comment of a value by where it comes from. Of an estimate, a
// COMMENT card tells all that the short comment has no room for.
func source(h *fits.Header, key, origin string) string {
	how, estimated := strings.CutPrefix(origin, "estimated: ")
	switch {
	case origin == "":
		return ""
	case estimated:
		h.AddComment(key + " is an estimate: " + strings.ReplaceAll(how, "±", "+-"))
		return " estimate, see COMMENT"
	}
	return " from " + origin
}

// frameCards keep what later stages need of the new frame's header.
func frameCards(h *fits.Header, f *frame.Frame) {
	h.Set("FRAME", f.Name, "name of the new frame")
	h.Set("FRAMEPTH", f.Path, "its path")
	h.Set("FRAMESHA", f.Checksum, "SHA-256 of its file")
	number := func(key string, v float64, comment string) {
		if !math.IsNaN(v) && !math.IsInf(v, 0) {
			h.Set(key, v, comment)
		}
	}
	m := f.Meta
	number("GAIN", m.Gain, "[electron/count]"+source(h, "GAIN", m.Origin["gain"]))
	number("RDNOISE", m.ReadNoise, "[electron]"+source(h, "RDNOISE", m.Origin["read_noise"]))
	number("SATURATE", m.Saturation, "[count]"+source(h, "SATURATE", m.Origin["saturation"]))
	number("EXPTIME", m.Exposure, "[s]")
	number("MJD-AVG", m.MidMJD, "[d] UTC, middle of the exposure")
	number("NEWZP", m.ZeroPoint, "[mag] of one count, from the frame's header")
	if m.Filter != "" {
		h.Set("FILTER", m.Filter, "")
	}
	if m.Field != "" {
		h.Set("OBJECT", m.Field, "field")
	}
}

// Write writes difference.fits: whole or not at all. The cards of provenance
// are added to the primary header; it may be nil.
func (d *Difference) Write(path string, provenance *fits.Header) error {
	return d.WriteCompressed(path, provenance, fits.Compression{})
}

// WriteCompressed is Write with the planes compressed. Without quantisation
// the file gives the same difference.
func (d *Difference) WriteCompressed(path string, provenance *fits.Header, c fits.Compression) error {
	if d.Injected {
		return fmt.Errorf("%s: the difference of %s holds injected sources and is not written", path, d.Frame.Name)
	}
	primary := &fits.Header{}
	if provenance != nil {
		primary = provenance.Clone()
	}
	frameCards(primary, d.Frame)
	for _, c := range infoCards {
		switch {
		case c.text != nil:
			primary.Set(c.key, *c.text(&d.Info), c.comment)
		case c.number != nil:
			if v := *c.number(&d.Info); !math.IsNaN(v) && !math.IsInf(v, 0) {
				primary.Set(c.key, v, c.comment)
			}
		default:
			primary.Set(c.key, int64(*c.count(&d.Info)), c.comment)
		}
	}
	if d.Artefacts != nil {
		for _, t := range d.Artefacts.Streaks {
			primary.AddHistory(fmt.Sprintf("trail from x=%.1f y=%.1f to x=%.1f y=%.1f, %.2f deg, %.1f px wide, %.3g counts per px of length",
				t.X0, t.Y0, t.X1, t.Y1, t.Angle, t.FWHM, t.Brightness))
		}
	}
	plane := func(name, unit string, img *frame.Image) *fits.ImageHDU {
		return &fits.ImageHDU{Name: name, Header: planeHeader(d.Frame.WCS, unit), Width: img.Width, Height: img.Height, Float: img.Pix}
	}
	bits := make([]uint16, len(d.Flags.Bits))
	for i, b := range d.Flags.Bits {
		bits[i] = uint16(b)
	}
	flags := &fits.ImageHDU{Name: extFlags, Header: planeHeader(d.Frame.WCS, ""), Width: d.Flags.Width, Height: d.Flags.Height, Bits: bits}
	for _, f := range frame.FlagNames {
		flags.Header.AddComment(fmt.Sprintf("bit %d (value %d): %s, %s", bitNumber(f.Bit), f.Bit, f.Name, f.Meaning))
	}
	psfHDU := d.PSF.Encode(extPSF)
	return fits.WriteCompressed(path, c, primary,
		plane(extDifference, "count", d.Image), plane(extVariance, "count2", d.Variance), plane(extSignificance, "", d.Significance),
		flags, psfHDU, plane(extNew, "count", d.New), plane(extReference, "count", d.Reference),
		startable.New(extSources, d.ReferenceStars))
}

func bitNumber(b frame.Flag) int {
	n := 0
	for b > 1 {
		b >>= 1
		n++
	}
	return n
}

func planeHeader(w *wcs.WCS, unit string) *fits.Header {
	h := &fits.Header{}
	if unit != "" {
		h.Set("BUNIT", unit, "")
	}
	if w != nil {
		for _, c := range w.Cards() {
			h.Set(c.Key, c.Value, c.Comment)
		}
	}
	return h
}

// Read reads a file made by Write. What it holds gives the same candidates as
// the difference in memory. Frame.Image is left nil: New holds the new frame
// without its sky.
func Read(path string) (*Difference, error) {
	f, err := fits.Open(path)
	if err != nil {
		return nil, frame.Problemf(frame.ProblemUnreadable, "%v", err)
	}
	defer f.Close()
	d := &Difference{Frame: &frame.Frame{Meta: frame.UnknownMeta()}}
	d.Info = unknownInfo()
	primary := f.HDUs()[0].Header
	readFrame(d.Frame, primary)
	readInfo(&d.Info, primary)
	plane := func(name string) (*frame.Image, error) {
		i, err := f.Find(name)
		if err != nil {
			return nil, notOurs(path, err)
		}
		img, err := f.Image(i)
		if err != nil {
			return nil, notOurs(path, err)
		}
		return &frame.Image{Width: img.Width, Height: img.Height, Pix: img.Pix}, nil
	}
	for _, p := range []struct {
		name string
		dst  **frame.Image
	}{{extDifference, &d.Image}, {extVariance, &d.Variance}, {extSignificance, &d.Significance}, {extNew, &d.New}, {extReference, &d.Reference}} {
		if *p.dst, err = plane(p.name); err != nil {
			return nil, err
		}
		if !(*p.dst).SameShape(d.Image) {
			return nil, notOurs(path, fmt.Errorf("%s is %d×%d, %s is %d×%d", p.name, (*p.dst).Width, (*p.dst).Height, extDifference, d.Image.Width, d.Image.Height))
		}
	}
	i, err := f.Find(extDifference)
	if err != nil {
		return nil, notOurs(path, err)
	}
	if d.Frame.WCS, err = wcs.FromKeywords(f.HDUs()[i].Header); err != nil {
		return nil, notOurs(path, err)
	}
	if i, err = f.Find(extFlags); err != nil {
		return nil, notOurs(path, err)
	}
	flags, err := f.Flags(i)
	if err != nil {
		return nil, notOurs(path, err)
	}
	if flags.Width != d.Image.Width || flags.Height != d.Image.Height {
		return nil, notOurs(path, fmt.Errorf("%s is %d×%d, %s is %d×%d", extFlags, flags.Width, flags.Height, extDifference, d.Image.Width, d.Image.Height))
	}
	d.Flags = frame.NewMask(flags.Width, flags.Height)
	for i, b := range flags.Bits {
		d.Flags.Bits[i] = frame.Flag(b)
	}
	d.Frame.Flags = d.Flags
	if i, err = f.Find(extPSF); err != nil {
		return nil, notOurs(path, err)
	}
	cube, err := f.Cube(i)
	if err != nil {
		return nil, notOurs(path, err)
	}
	if d.PSF, err = psf.Decode(cube); err != nil {
		return nil, notOurs(path, err)
	}
	if i, err = f.Find(extSources); err != nil {
		return nil, notOurs(path, err)
	}
	table, err := f.Table(i)
	if err != nil {
		return nil, notOurs(path, err)
	}
	if d.ReferenceStars, err = startable.Read(table); err != nil {
		return nil, notOurs(path, err)
	}
	return d, nil
}

func notOurs(path string, err error) error {
	text := err.Error()
	if !strings.Contains(text, path) {
		text = path + ": " + text
	}
	return frame.Problemf(frame.ProblemUnreadable, "%s; want a difference file made by `nightsift subtract`", text)
}

func unknownInfo() Info {
	var i Info
	for _, c := range infoCards {
		if c.number != nil {
			*c.number(&i) = math.NaN()
		}
	}
	return i
}

func readInfo(info *Info, h *fits.Header) {
	for _, c := range infoCards {
		switch {
		case c.text != nil:
			if v, ok := h.Str(c.key); ok {
				*c.text(info) = v
			}
		case c.number != nil:
			if v, ok := h.Float(c.key); ok {
				*c.number(info) = v
			}
		default:
			if v, ok := h.Int(c.key); ok {
				*c.count(info) = int(v)
			}
		}
	}
}

func readFrame(f *frame.Frame, h *fits.Header) {
	f.Name, _ = h.Str("FRAME")
	f.Path, _ = h.Str("FRAMEPTH")
	f.Checksum, _ = h.Str("FRAMESHA")
	f.Meta.Filter, _ = h.Str("FILTER")
	f.Meta.Field, _ = h.Str("OBJECT")
	for _, n := range []struct {
		key string
		dst *float64
	}{{"GAIN", &f.Meta.Gain}, {"RDNOISE", &f.Meta.ReadNoise}, {"SATURATE", &f.Meta.Saturation}, {"EXPTIME", &f.Meta.Exposure}, {"MJD-AVG", &f.Meta.MidMJD}, {"NEWZP", &f.Meta.ZeroPoint}} {
		if v, ok := h.Float(n.key); ok {
			*n.dst = v
		}
	}
}
