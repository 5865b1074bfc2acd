package survey

import (
	"math"
	"path/filepath"

	"nightsift/align"
	"nightsift/catalog"
	"nightsift/internal/frame"
	"nightsift/subtract"
)

// The record of a frame fills up as the stages pass, so that a frame that is
// set aside half way keeps what was known by then.

func fromFrame(r *catalog.FrameRecord, n *frame.Frame) {
	r.Filter, r.Field = n.Meta.Filter, n.Meta.Field
	r.MidMJD, r.Exposure = n.Meta.MidMJD, n.Meta.Exposure
	r.ZeroPoint = n.Meta.ZeroPoint
	r.Width, r.Height = n.Image.Width, n.Image.Height
	if n.WCS != nil {
		r.SetWCS(n.WCS, r.Width, r.Height)
	}
	r.Inputs = []catalog.Input{{Role: "new", Name: filepath.Base(n.Path), Checksum: n.Checksum}}
}

func fromPair(r *catalog.FrameRecord, p *align.Pair) {
	r.Sky, r.SkyNoise = p.NewBackground.MedianSky, p.NewBackground.MedianNoise
	r.FWHM, r.ReferenceFWHM = p.NewStars.FWHM, p.ReferenceFWHM
	r.StarsMatched, r.AstrometryRMS = len(p.Matches), p.RMS()
	r.FluxScale = p.FluxScale
	if p.WCS != nil {
		r.SetWCS(p.WCS, p.New.Image.Width, p.New.Image.Height)
	}
	r.Inputs = append(r.Inputs, catalog.Input{Role: "reference", Name: filepath.Base(p.Reference.Path), Checksum: p.Reference.Checksum})
}

func fromDifference(r *catalog.FrameRecord, d *subtract.Difference) {
	r.FWHM, r.ReferenceFWHM = d.Info.FWHMNew, d.Info.FWHMReference
	r.ZeroPoint, r.FluxScale = d.Info.ZeroPoint, d.Info.FluxScale
	r.ZeroPointErr, r.ZeroPointSource = d.Info.ZeroPointErr, d.Info.ZeroPointSource
	r.NoiseRatio = d.Info.NoiseRatio
	r.MagLimit5Sigma = d.Info.MagLimit5
	if math.IsInf(r.MagLimit5Sigma, 0) {
		r.MagLimit5Sigma = math.NaN()
	}
}
