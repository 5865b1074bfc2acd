package reference

import (
	"errors"
	"fmt"
	"math"

	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/wcs"
)

// Names of the extensions of a reference; the image is the primary HDU.
const (
	extVariance = "VARIANCE"
	extFlags    = "FLAGS"
	extCoverage = "COVERAGE"
	extPSF      = "PSF"
	extInputs   = "INPUTS"
)

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

// MagLimit is Limit as a magnitude, NaN without a zero point.
func (p *Product) MagLimit() float64 { return p.Frame.Meta.ZeroPoint - 2.5*math.Log10(p.Limit) }

// Write writes the reference, whole or not at all. The cards of provenance
// (nil for none) go into the primary header.
func (p *Product) Write(path string, provenance *fits.Header) error {
	f := p.Frame
	h := planeHeader(f.WCS, "count")
	if provenance != nil {
		for _, c := range provenance.Cards() {
			h.Set(c.Key, c.Value, c.Comment)
		}
	}
	number := func(key string, v float64, comment string) {
		if !math.IsNaN(v) && !math.IsInf(v, 0) {
			h.Set(key, v, comment)
		}
	}
	m := f.Meta
	if m.Field != "" {
		h.Set("OBJECT", m.Field, "field")
	}
	if m.Filter != "" {
		h.Set("FILTER", m.Filter, "")
	}
	number("GAIN", m.Gain, "[electron/count] effective, for the photons of sources")
	number("RDNOISE", m.ReadNoise, "[electron] with GAIN the noise of the sky, as none is left")
	number("SATURATE", m.Saturation, "[count] where the first frame saturates")
	number("EXPTIME", m.Exposure, "[s] sum of all frames")
	number("MJD-AVG", m.MidMJD, "[d] UTC, weighted middle of the exposures")
	number("MJD-BEG", p.First, "[d] UTC, middle of the first exposure")
	number("MJD-END", p.Last, "[d] UTC, middle of the last exposure")
	number("MAGZP", m.ZeroPoint, "[mag] of one count")
	used := 0
	for _, in := range p.Inputs {
		if in.Used {
			used++
		}
		if in.Anchor {
			h.Set("ANCHOR", in.Name, "frame of this grid and scale of fluxes")
		}
	}
	h.Set("NCOMBINE", int64(used), "frames in the stack")
	h.Set("NOFFERED", int64(len(p.Inputs)), "frames offered")
	h.Set("METHOD", p.Method, "how they were added")
	h.Set("METHWHY", p.MethodReason, "why this way")
	number("FWHM", p.FWHM, "[px] of the stack, at its middle")
	number("SKYNOISE", p.Noise, "[count] white noise with the same effect on a star")
	number("PIXNOISE", p.PixelNoise, "[count] spread of single pixels")
	number("NOISECOR", p.Correlation, "of second differences; 1/6 if white")
	number("FLXLIM5", p.Limit, "[count] 5 sigma point source, measured")
	number("FLXPRED", p.Predicted, "[count] the same, predicted from the frames")
	number("FLXBEST", p.BestFrame, "[count] the same, of the best single frame")
	number("FLXMEAN", p.MeanLimit, "[count] the same, of the mean, measured")
	number("FLXPROP", p.ProperLimit, "[count] of proper coaddition, measured")
	number("MAGLIM5", p.MagLimit(), "[mag] 5 sigma point source")

	bits := make([]uint16, len(f.Flags.Bits))
	for i, b := range f.Flags.Bits {
		bits[i] = uint16(b)
	}
	flags := &fits.ImageHDU{Name: extFlags, Header: planeHeader(f.WCS, ""), Width: f.Image.Width, Height: f.Image.Height, Bits: bits}
	flags.Header.Set(load.CompanionCard, true, "belongs to the image, no frame of its own")
	for _, n := range frame.FlagNames {
		if n.Bit&(frame.Saturated|frame.NoData) != 0 {
			flags.Header.AddComment(fmt.Sprintf("value %d: %s, %s", n.Bit, n.Name, n.Meaning))
		}
	}
	coverage := &fits.ImageHDU{Name: extCoverage, Header: planeHeader(f.WCS, ""), Width: f.Image.Width, Height: f.Image.Height, Depth: 2,
		Float: append(append(make([]float32, 0, 2*len(p.Used.Pix)), p.Used.Pix...), p.Outliers.Pix...)}
	coverage.Header.AddComment("plane 1: number of frames in each pixel")
	coverage.Header.AddComment("plane 2: number of frames left out there as outliers")
	variance := &fits.ImageHDU{Name: extVariance, Header: planeHeader(f.WCS, "count2"), Width: f.Image.Width, Height: f.Image.Height, Float: f.Variance.Pix}
	variance.Header.AddComment("of the sky; the photons of sources follow from GAIN")
	return fits.WritePrimary(path, &fits.ImageHDU{Header: h, Width: f.Image.Width, Height: f.Image.Height, Float: f.Image.Pix},
		variance, flags, coverage, p.PSF.Encode(extPSF), inputTable(p.Inputs))
}

// inputColumns tie the table of inputs to its fields.
var inputColumns = []struct {
	name, unit string
	text       func(*Input) *string
	number     func(*Input) *float64
	whole      func(*Input) *int
	flag       func(*Input) *bool
}{
	{name: "frame", text: func(i *Input) *string { return &i.Name }},
	{name: "used", flag: func(i *Input) *bool { return &i.Used }},
	{name: "anchor", flag: func(i *Input) *bool { return &i.Anchor }},
	{name: "reason", text: func(i *Input) *string { return &i.Reason }},
	{name: "detail", text: func(i *Input) *string { return &i.Detail }},
	{name: "weight", number: func(i *Input) *float64 { return &i.Weight }},
	{name: "flux_scale", number: func(i *Input) *float64 { return &i.Scale }},
	{name: "flux_scale_err", number: func(i *Input) *float64 { return &i.ScaleErr }},
	{name: "information", unit: "count-2", number: func(i *Input) *float64 { return &i.Share }},
	{name: "rejected", number: func(i *Input) *float64 { return &i.Rejected }},
	{name: "stars_matched", whole: func(i *Input) *int { return &i.Stars }},
	{name: "astrometry_rms_px", unit: "pixel", number: func(i *Input) *float64 { return &i.RMS }},
	{name: "fwhm_px", unit: "pixel", number: func(i *Input) *float64 { return &i.GridFWHM }},
	{name: "noise", unit: "count", number: func(i *Input) *float64 { return &i.GridNoise }},
	{name: "own_fwhm_px", unit: "pixel", number: func(i *Input) *float64 { return &i.FWHM }},
	{name: "roundness", number: func(i *Input) *float64 { return &i.Roundness }},
	{name: "own_sky", unit: "count", number: func(i *Input) *float64 { return &i.Sky }},
	{name: "own_noise", unit: "count", number: func(i *Input) *float64 { return &i.Noise }},
	{name: "gain", unit: "electron/count", number: func(i *Input) *float64 { return &i.Gain }},
	{name: "read_noise", unit: "electron", number: func(i *Input) *float64 { return &i.ReadNoise }},
	{name: "saturation", unit: "count", number: func(i *Input) *float64 { return &i.Saturation }},
	{name: "zero_point", unit: "mag", number: func(i *Input) *float64 { return &i.ZeroPoint }},
	{name: "mid_mjd", unit: "d", number: func(i *Input) *float64 { return &i.MidMJD }},
	{name: "exposure_s", unit: "s", number: func(i *Input) *float64 { return &i.Exposure }},
	{name: "filter", text: func(i *Input) *string { return &i.Filter }},
	{name: "field", text: func(i *Input) *string { return &i.Field }},
	{name: "path", text: func(i *Input) *string { return &i.Path }},
	{name: "sha256", text: func(i *Input) *string { return &i.Checksum }},
	{name: "pixels_sha256", text: func(i *Input) *string { return &i.Pixels }},
}

func inputTable(list []Input) *fits.Table {
	t := &fits.Table{Name: extInputs}
	for _, c := range inputColumns {
		column := fits.Column{Name: c.name, Unit: c.unit}
		switch {
		case c.text != nil:
			v := make([]string, len(list))
			for i := range list {
				v[i] = *c.text(&list[i])
			}
			column.Data = v
		case c.number != nil:
			v := make([]float64, len(list))
			for i := range list {
				v[i] = *c.number(&list[i])
			}
			column.Data = v
		case c.whole != nil:
			v := make([]int32, len(list))
			for i := range list {
				v[i] = int32(*c.whole(&list[i]))
			}
			column.Data = v
		default:
			v := make([]bool, len(list))
			for i := range list {
				v[i] = *c.flag(&list[i])
			}
			column.Data = v
		}
		t.Columns = append(t.Columns, column)
	}
	return t
}

// ReadInputs reads the table of inputs of a reference. The error names the
// file and what is wrong with it.
func ReadInputs(path string) ([]Input, error) {
	t, err := fits.ReadTable(path, extInputs)
	if errors.Is(err, fits.ErrNoHDU) {
		return nil, fmt.Errorf("%s is no reference made by nightsift: %w", path, err)
	} else if err != nil {
		return nil, err
	}
	list := make([]Input, t.Rows())
	for _, c := range inputColumns {
		switch {
		case c.text != nil:
			var v []string
			if v, err = t.Strings(c.name); err == nil {
				for i := range list {
					*c.text(&list[i]) = v[i]
				}
			}
		case c.number != nil:
			var v []float64
			if v, err = t.Floats(c.name); err == nil {
				for i := range list {
					*c.number(&list[i]) = v[i]
				}
			}
		case c.whole != nil:
			var v []int64
			if v, err = t.Ints(c.name); err == nil {
				for i := range list {
					*c.whole(&list[i]) = int(v[i])
				}
			}
		default:
			var v []bool
			if v, err = t.Bools(c.name); err == nil {
				for i := range list {
					*c.flag(&list[i]) = v[i]
				}
			}
		}
		if err != nil {
			return nil, fmt.Errorf("%s[%s]: %w", path, extInputs, err)
		}
	}
	return list, nil
}
