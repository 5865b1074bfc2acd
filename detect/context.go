package detect

import (
	"math"

	"nightsift/internal/astro"
	"nightsift/internal/frame"
	"nightsift/internal/realbogus"
)

// describe fills what the fit says; kind, magnitudes and probability follow
// in finish.
func (s *search) describe(psf *localPSF, p peak, src *source, ev *evidence) Candidate {
	nan := math.NaN()
	c := Candidate{
		X: src.x, Y: src.y, XErr: src.xErr(), YErr: src.yErr(),
		Flux: src.flux, FluxErr: src.fluxErr(), Significance: p.s,
		FitChi2: ev.reduced, Length: nan, Angle: nan,
		RA: nan, Dec: nan, Mag: nan, MagErr: nan, MagLimit: nan,
		ReferenceDistance: nan, ReferenceMag: nan, MidMJD: nan,
	}
	if s.in.zeroPoint == s.in.zeroPoint && ev.sigma > 0 {
		c.MagLimit = s.in.zeroPoint - 2.5*math.Log10(5*ev.sigma)
	}
	c.Flags = s.footprintFlags(psf, src.x, src.y)
	return c
}

// footprintFlags joins the bits of the pixels where the PSF is above 5 % of
// its peak.
func (s *search) footprintFlags(psf *localPSF, x, y float64) (bits frame.Flag) {
	r := int(math.Ceil(1.5 * s.fwhm))
	top := psf.at(0, 0)
	ci, cj := int(math.Round(x))-1, int(math.Round(y))-1
	for j := max(0, cj-r); j <= min(s.in.flags.Height-1, cj+r); j++ {
		row := s.in.flags.Row(j)
		for i := max(0, ci-r); i <= min(s.in.flags.Width-1, ci+r); i++ {
			if row[i] != 0 && psf.at(float64(i+1)-x, float64(j+1)-y) > 0.05*top {
				bits |= row[i]
			}
		}
	}
	return bits
}

// features computes what the model sees. Crowding and Absorbed are left to
// the caller.
func (s *search) features(psf *localPSF, p peak, src *source, ev *evidence) (f realbogus.Features) {
	absS := math.Abs(p.s)
	flux := math.Abs(src.flux)
	s2 := math.Max(25, p.s*p.s)
	f[realbogus.LogSN] = math.Log10(absS)
	f[realbogus.Sign] = math.Copysign(1, p.s)
	// A trail that explains the data replaces the point source as the measure.
	base, reduced := ev.bicPoint, ev.reduced
	if t := &ev.trail; t.ok && t.length > 0.8*s.fwhm && ev.bicTrail+10 < base {
		base, reduced = ev.bicTrail, t.chi2/math.Max(1, float64(t.free))
	}
	f[realbogus.Chi2Excess] = math.Log10(math.Max(reduced, 0.01))
	f[realbogus.Size] = ev.size
	f[realbogus.SizeSig] = math.Asinh(ev.sizeSig)
	f[realbogus.Elongation] = ev.elong
	f[realbogus.ElongationSig] = math.Asinh(ev.elongSig)
	margin := func(than, bic float64) float64 {
		if math.IsInf(bic, 0) || math.IsNaN(bic) {
			return 0
		}
		return (than - bic) / s2
	}
	f[realbogus.HitMargin] = margin(base, ev.bicHit)
	f[realbogus.BroadMargin] = margin(base, ev.bicBroad)
	f[realbogus.TrailMargin] = margin(ev.bicPoint, ev.bicTrail)
	f[realbogus.DipoleMargin] = margin(base, ev.bicDipole)
	f[realbogus.Oppose] = ev.oppose
	f[realbogus.DipoleSum] = ev.dipoleSum
	f[realbogus.Contradicts] = ev.contradicts
	f[realbogus.Flagged] = ev.flagged
	f[realbogus.SaturationDistance] = math.Log10(1 + s.saturationDistance(src.x, src.y)/s.fwhm)
	f[realbogus.Offset] = math.Hypot(src.x-p.x, src.y-p.y) / s.fwhm
	edge := math.Min(math.Min(src.x, float64(s.in.image.Width)+1-src.x), math.Min(src.y, float64(s.in.image.Height)+1-src.y))
	f[realbogus.EdgeDistance] = math.Log10(1 + math.Max(0, edge)/s.fwhm)

	// The reference beneath: its PSF flux, the score with which its light
	// would be seen, and the slope of that.
	beneath, slope := s.planeFlux(psf, s.in.reference, src.x, src.y)
	noise := ev.sigma
	if !(noise > 0) {
		noise = src.fluxErr()
	}
	f[realbogus.ReferenceContrast] = math.Log10(flux / math.Max(beneath, math.Max(noise, 1e-30)))
	scale := math.Max(s.in.scaleError, 0.003)
	jitter := math.Max(s.in.jitter, 0.01)
	if math.IsNaN(scale) {
		scale = 0.01
	}
	if math.IsNaN(jitter) {
		jitter = 0.05
	}
	expected := math.Hypot(scale*beneath, jitter*slope) / noise
	if math.IsNaN(expected) {
		expected = 0
	}
	f[realbogus.ExpectedResidual] = math.Log10(absS / (1 + expected))

	f[realbogus.StarDistance], f[realbogus.StarGlare], f[realbogus.HaloDistance] = 10, -5, 10
	reach := 10 * s.fwhm
	s.buf = s.stars.within(s.buf[:0], src.x, src.y, reach)
	for _, k := range s.buf {
		st := &s.in.places[k]
		d := math.Hypot(st.x-src.x, st.y-src.y) / s.fwhm
		f[realbogus.StarDistance] = math.Min(f[realbogus.StarDistance], d)
		if st.flux > 0 {
			// A profile that falls with the fifth power of the radius far out.
			f[realbogus.HaloDistance] = math.Min(f[realbogus.HaloDistance], d/(0.5*math.Pow(math.Max(1, st.flux/noise), 0.2)))
		}
		if st.flux > 0 && flux > 0 {
			f[realbogus.StarGlare] = math.Max(f[realbogus.StarGlare], math.Log10(st.flux/flux)-d/2)
		}
	}
	fresh, _ := s.planeFlux(psf, s.in.newSub, src.x, src.y)
	f[realbogus.NewFlux] = fresh / math.Max(flux, 1e-30)

	f[realbogus.ResidueMargin] = margin(base, ev.residue.bic)
	f[realbogus.ResidueShift] = ev.residue.shift
	kept := ev.residue.kept
	if math.IsNaN(kept) {
		kept = absS
	}
	f[realbogus.KeptSN] = math.Log10(math.Max(0.1, kept))
	f[realbogus.KeptFraction] = kept / absS
	ring, light := s.unrest(src.x, src.y)
	f[realbogus.Surround], f[realbogus.LitSurround] = math.Log10(ring), math.Log10(light)
	f[realbogus.Width] = math.Log10(s.fwhm)
	return f
}

// planeFlux returns the PSF-weighted flux of a plane at a place, and the
// length of its derivative with place [count/px].
func (s *search) planeFlux(psf *localPSF, m *frame.Image, x, y float64) (flux, slope float64) {
	if m == nil {
		return 0, 0
	}
	r := int(math.Ceil(1.5 * s.fwhm))
	i0, i1 := max(0, int(math.Round(x))-1-r), min(m.Width, int(math.Round(x))+r)
	j0, j1 := max(0, int(math.Round(y))-1-r), min(m.Height, int(math.Round(y))+r)
	if i0 >= i1 || j0 >= j1 {
		return 0, 0
	}
	for len(s.ft.patches) < 1 {
		s.ft.patches = append(s.ft.patches, patch{})
	}
	p := &s.ft.patches[0]
	psf.draw(p, x, y, i0, j0, i1-i0, j1-j0, false)
	var pd, pp, gx, gy float64
	for j := j0; j < j1; j++ {
		row := m.Row(j)
		for i := i0; i < i1; i++ {
			v := float64(row[i])
			k := (j-j0)*p.w + i - i0
			if math.IsNaN(v) || math.IsInf(v, 0) || s.in.flags.Bits[j*m.Width+i]&excluded != 0 {
				continue
			}
			pd += p.p[k] * v
			pp += p.p[k] * p.p[k]
			gx += p.px[k] * v
			gy += p.py[k] * v
		}
	}
	if !(pp > 0) {
		return 0, 0
	}
	return pd / pp, math.Hypot(gx, gy) / pp
}

// saturationDistance returns the distance of the nearest saturated or bled
// pixel [px], at most 24 FWHM (the log of which ends the feature's range).
func (s *search) saturationDistance(x, y float64) float64 {
	most := 24 * s.fwhm
	limit := min(most, 80)
	best := limit * limit
	found := false
	ci, cj := int(math.Round(x))-1, int(math.Round(y))-1
	r := int(limit)
	for dj := 0; dj <= r; dj++ {
		if float64(dj*dj) >= best {
			break
		}
		for _, j := range [2]int{cj - dj, cj + dj} {
			if j < 0 || j >= s.in.flags.Height || dj == 0 && j != cj {
				continue
			}
			row := s.in.flags.Row(j)
			reach := int(math.Sqrt(best - float64(dj*dj)))
			for i := max(0, ci-reach); i <= min(s.in.flags.Width-1, ci+reach); i++ {
				if row[i]&(frame.Saturated|frame.Bleed) != 0 {
					if d := float64((i-ci)*(i-ci) + dj*dj); d < best {
						best, found = d, true
					}
				}
			}
		}
	}
	if !found {
		return most
	}
	return math.Sqrt(best)
}

// kind decides what a candidate of a group is. A form must win by 10 in the
// information criterion (6 for hits, which cost much already) to replace the
// point source.
func (s *search) kind(c *Candidate, src *source, ev *evidence, f *realbogus.Features, residue bool) Kind {
	others := math.Min(math.Min(ev.bicPoint, ev.bicDipole), math.Min(ev.bicBroad, ev.bicTrail))
	thin := ev.hitPixels <= 2 || ev.hitMinor < 0.5*s.centre.sigma2
	switch {
	case math.IsNaN(src.flux) || ev.flagged > 0.4:
		return Artefact
	case ev.bicHit+6 < others && thin && (ev.size < 0 || ev.hitRest < 2):
		if src.flux > 0 {
			return CosmicRay
		}
		return Artefact
	case ev.bicDipole+10 < ev.bicPoint && ev.dipoleSum < 0.6:
		return Dipole
	case ev.trail.ok && ev.bicTrail+10 < math.Min(ev.bicPoint, ev.bicBroad) && ev.trail.length > 0.8*s.fwhm && ev.trail.chi2 < 4*float64(max(1, ev.trail.free)):
		return s.trailKind(&ev.trail)
	case ev.bicBroad+10 < ev.bicPoint && ev.size > 0.3:
		return Artefact
	case ev.reduced > 4 || residue && ev.reduced > 2 || ev.contradicts > 0.15:
		return Artefact
	case src.flux < 0:
		return Faded
	}
	// A source of the reference coincides when it lies within half the PSF,
	// or within the error of the position.
	reach := math.Hypot(0.5*s.fwhm, 3*math.Max(src.xErr(), src.yErr()))
	if i, _ := s.stars.nearest(src.x, src.y, math.Min(reach, s.fwhm)); i >= 0 {
		return Brightened
	}
	return NewSource
}

// finish adds what depends on place, brightness and kind.
func (s *search) finish(c *Candidate, f *realbogus.Features) {
	if s.in.sky != nil {
		if ra, dec, ok := s.in.sky(c.X, c.Y); ok {
			c.RA, c.Dec = ra, dec
		}
	}
	if c.Flux > 0 && !math.IsNaN(s.in.zeroPoint) {
		c.Mag = s.in.zeroPoint - 2.5*math.Log10(c.Flux)
		c.MagErr = 2.5 / math.Ln10 * c.FluxErr / c.Flux
	}
	far := math.Hypot(float64(s.in.image.Width), float64(s.in.image.Height))
	if i, d := s.stars.nearest(c.X, c.Y, far); i >= 0 {
		st := &s.in.places[i]
		c.ReferenceDistance = d * s.in.pixelScale
		if s.in.sky != nil {
			if ra, dec, ok := s.in.sky(st.x, st.y); ok && !math.IsNaN(c.RA) {
				c.ReferenceDistance = 3600 * astro.Separation(c.RA, c.Dec, ra, dec)
			}
		}
		if st.flux > 0 && !math.IsNaN(s.in.zeroPoint) {
			c.ReferenceMag = s.in.zeroPoint - 2.5*math.Log10(st.flux)
		}
	}
	f.Clean()
	c.Features = append([]float64(nil), f[:]...)
	q := s.model.Here(s.model.Probability(f), s.rates)
	c.RealProbability = realbogus.Posterior(q, c.Significance, s.rootDet, s.rates)
	// Beside a saturated pixel a residue may look like a point source: there
	// the model decides.
	switch c.Kind {
	case NewSource, Brightened, Faded:
		if (c.Flags&(frame.Saturated|frame.Bleed) != 0 || f[realbogus.SaturationDistance] < math.Log10(1+1.2)) && c.RealProbability < 0.5 {
			c.Kind = Artefact
		}
	}
	if s.cfg.Stamps {
		c.StampDifference = cutout(s.in.image, c.X, c.Y)
		c.StampNew = cutout(s.in.newSub, c.X, c.Y)
		c.StampReference = cutout(s.in.reference, c.X, c.Y)
	}
}

// cutout copies the stamp around a place; NaN outside the plane.
func cutout(m *frame.Image, x, y float64) []float32 {
	out := make([]float32, StampSize*StampSize)
	nan := float32(math.NaN())
	for k := range out {
		out[k] = nan
	}
	if m == nil || math.IsNaN(x) || math.IsNaN(y) {
		return out
	}
	i0, j0 := int(math.Round(x))-1-StampSize/2, int(math.Round(y))-1-StampSize/2
	for b := range StampSize {
		j := j0 + b
		if j < 0 || j >= m.Height {
			continue
		}
		lo, hi := max(0, -i0), min(StampSize, m.Width-i0)
		if lo < hi {
			copy(out[b*StampSize+lo:b*StampSize+hi], m.Row(j)[i0+lo:i0+hi])
		}
	}
	return out
}
