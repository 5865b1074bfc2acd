package subtract

import (
	"fmt"
	"math"

	"nightsift/internal/frame"
	"nightsift/internal/photometry"
	"nightsift/internal/psf"
)

// setZeroPoint finds the magnitude of one count: from the stars of a catalogue
// where the pair brings some, else from the reference's zero point and the
// flux scale, else from the new frame's header.
func (j *job) setZeroPoint(info *Info) {
	p := j.pair
	nan := math.NaN()
	info.ZeroPointErr, info.ZeroPointScatter, info.ColourTerm, info.ColourTermErr = nan, nan, nan, nan
	why := ""
	if s := p.Standards; s != nil {
		info.ZeroPointChecksum = s.Checksum
		r := j.calibrate()
		info.ZeroPointErr, info.ZeroPointScatter, info.ZeroPointStars, info.ZeroPointClipped = r.Err, r.Scatter, r.Stars, r.Clipped
		info.ColourTerm, info.ColourTermErr = r.ColourTerm, r.ColourTermErr
		if r.Refusal == "" {
			info.ZeroPoint = r.ZeroPoint
			info.ZeroPointSource = fmt.Sprintf("catalogue %s, column %s", s.Catalogue, s.Column)
			if r.Note != "" {
				info.ZeroPointSource += "; " + r.Note
			}
			return
		}
		why = fmt.Sprintf("; catalogue %s was not used: %s", s.Catalogue, r.Refusal)
	}
	info.ZeroPoint = p.Reference.Meta.ZeroPoint + 2.5*math.Log10(info.FluxScale)
	info.ZeroPointSource = "zero point of the reference and the flux scale"
	if math.IsNaN(info.ZeroPoint) {
		info.ZeroPoint = p.New.Meta.ZeroPoint
		info.ZeroPointSource = "header of the new frame"
	}
	if math.IsNaN(info.ZeroPoint) {
		info.ZeroPointSource = "none known"
	}
	info.ZeroPointSource += why
}

// calibrate measures the pair's standards by PSF fits, as candidates are, and
// compares them with their magnitudes.
func (j *job) calibrate() photometry.Result {
	p := j.pair
	s := p.Standards
	if s.Refusal != "" {
		r := photometry.Calibrate(nil, s.Settings)
		r.Refusal = s.Refusal
		return r
	}
	const most = 400
	var list []photometry.Measured
	for _, t := range s.Stars {
		if len(list) == most {
			break
		}
		fit, ok := j.newPSF.FitStar(j.plain, p.New.Variance, p.New.Flags, t.X, t.Y, j.newGain, psf.StarOptions{})
		if !ok || !(fit.Flux > 0) || fit.Lost > 0.02 || fit.Flags&frame.Unusable != 0 {
			continue
		}
		list = append(list, photometry.Measured{Mag: t.Mag, MagErr: t.MagErr, Colour: t.Colour, Flux: fit.Flux, FluxErr: fit.FluxErr})
	}
	return photometry.Calibrate(list, s.Settings)
}
