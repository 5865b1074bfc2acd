package subtract

import (
	"math"
	"sort"

	"nightsift/align"
	"nightsift/internal/frame"
	"nightsift/internal/psf"
	"nightsift/internal/robust"
)

// fluxes holds what PSF fits to the stars that both frames show say.
type fluxes struct {
	scale, err float64 // counts of the new frame for one of the reference, 1 sigma
	scatter    float64 // of constant stars around it, relative
	stars      int     // behind the scale; 0: it is the pair's
	// Logarithm of the ratio and its error for each match; NaN where it was not measured.
	ratio, ratioErr []float64
}

// compareFluxes measures the ratio of total fluxes by PSF fits to at most so many stars
// that both frames show. The kernel's sum is not used for it, since a kernel of finite size
// misses the light that one PSF scatters farther than the other.
func (j *job) compareFluxes(most int) fluxes {
	p := j.pair
	f := fluxes{scale: p.FluxScale, err: p.FluxScaleErr, ratio: make([]float64, len(p.Matches)), ratioErr: make([]float64, len(p.Matches))}
	f.scatter = p.FluxScaleErr / p.FluxScale * math.Sqrt(float64(p.FluxScaleStars))
	order := make([]int, len(p.Matches))
	for i := range order {
		order[i] = i
		f.ratio[i], f.ratioErr[i] = math.NaN(), math.NaN()
	}
	sort.SliceStable(order, func(a, b int) bool {
		return p.NewStars.Stars[p.Matches[order[a]].New].SN > p.NewStars.Stars[p.Matches[order[b]].New].SN
	})
	var values, errs []float64
	options := psf.StarOptions{}
	// only the light within four FWHM is compared: what lies farther out each
	// PSF has extrapolated by itself, and between crowded stars or on a nebula
	// that says little.
	x, y := float64(j.width+1)/2, float64(j.height+1)/2
	reach := 4 * max(j.newPSF.FWHM(x, y), j.refPSF.FWHM(x, y))
	wings := math.Log(enclosed(j.newPSF, x, y, reach) / enclosed(j.refPSF, x, y, reach))
	for _, i := range order {
		s, t := p.NewStars.Stars[p.Matches[i].New], p.ReferenceStars[p.Matches[i].Reference]
		if len(values) == most || s.SN < 10 || s.SN < 20 && len(values) >= 20 {
			break
		}
		if (s.Flags|t.Flags)&frame.Unusable != 0 || s.Extended || t.Extended || !(s.Neighbour > 3*p.NewStars.FWHM) {
			continue
		}
		n, ok := j.newPSF.FitStar(j.plain, p.New.Variance, p.New.Flags, s.X, s.Y, j.newGain, options)
		if !ok || !(n.Flux > 0) || n.Lost > 0.02 {
			continue
		}
		r, ok := j.refPSF.FitStar(p.Reference.Image, p.Reference.Variance, p.Reference.Flags, t.X, t.Y, j.refGain, options)
		if !ok || !(r.Flux > 0) || r.Lost > 0.02 {
			continue
		}
		f.ratio[i] = math.Log(n.Flux/r.Flux) + wings
		f.ratioErr[i] = math.Hypot(n.FluxErr/n.Flux, r.FluxErr/r.Flux)
		values, errs = append(values, f.ratio[i]), append(errs, f.ratioErr[i])
	}
	if len(values) < 5 {
		return f
	}
	// Where stars are few, many of them may be variable.
	centre, sigma, scatter, members := robust.Common(values, errs, 0.003)
	f.scale, f.err, f.scatter, f.stars = math.Exp(centre), sigma*math.Exp(centre), scatter, members
	return f
}

// changed reports whether the flux of a match is not that of a constant star.
func (f *fluxes) changed(p *align.Pair, i int) bool {
	if f.ratio[i] == f.ratio[i] {
		return math.Abs(f.ratio[i]-math.Log(f.scale)) > 3.5*math.Hypot(f.ratioErr[i], f.scatter)
	}
	// By the star lists. They leave out other parts of the light of galaxies
	// under the two seeings, and follow the PSF over the field less well.
	s, t := &p.NewStars.Stars[p.Matches[i].New], &p.ReferenceStars[p.Matches[i].Reference]
	systematic := max(0.03, f.scatter)
	if s.Extended || t.Extended {
		systematic = max(0.1, f.scatter)
	}
	change := math.Abs(math.Log(s.Flux / t.Flux / p.FluxScale))
	return !(change < 4*math.Hypot(math.Hypot(1/s.SN, 1/t.SN), systematic))
}

// enclosed returns the part of a PSF's light within a radius [px].
func enclosed(m *psf.Model, x, y, radius float64) float64 {
	half := int(math.Ceil(radius))
	size := 2*half + 1
	stamp := make([]float32, size*size)
	m.Render(stamp, x, y, 0, 0)
	sum := 0.0
	for v := range size {
		for u := range size {
			if math.Hypot(float64(u-half), float64(v-half)) <= radius {
				sum += float64(stamp[v*size+u])
			}
		}
	}
	return sum
}
