package subtract

import (
	"math"
	"sort"

	"nightsift/internal/frame"
	"nightsift/internal/psf"
)

// fluxScale returns the counts of the new frame for one count of the
// reference: the ratio of total fluxes from PSF fits to stars that both frames
// show. The kernel's sum is not used for it, since a kernel of finite size
// misses the light that one PSF scatters farther than the other.
func (j *job) fluxScale(most int) (scale, err float64, used int) {
	p := j.pair
	type ratio struct{ value, weight float64 }
	var ratios []ratio
	order := make([]int, 0, len(p.Matches))
	for i := range p.Matches {
		order = append(order, i)
	}
	sort.SliceStable(order, func(a, b int) bool {
		return p.NewStars.Stars[p.Matches[order[a]].New].SN > p.NewStars.Stars[p.Matches[order[b]].New].SN
	})
	for _, i := range order {
		s, t := p.NewStars.Stars[p.Matches[i].New], p.ReferenceStars[p.Matches[i].Reference]
		if len(ratios) == most || s.SN < 20 {
			break
		}
		if (s.Flags|t.Flags)&frame.Unusable != 0 || !(s.Neighbour > 3*p.NewStars.FWHM) {
			continue
		}
		options := psf.StarOptions{}
		n, ok := j.newPSF.FitStar(j.plain, p.New.Variance, p.New.Flags, s.X, s.Y, j.newGain, options)
		if !ok || !(n.Flux > 0) || n.Lost > 0.02 {
			continue
		}
		r, ok := j.refPSF.FitStar(p.Reference.Image, p.Reference.Variance, p.Reference.Flags, t.X, t.Y, j.refGain, options)
		if !ok || !(r.Flux > 0) || r.Lost > 0.02 {
			continue
		}
		// A floor keeps a few bright stars from deciding alone.
		const floor = 0.005
		e := math.Hypot(n.FluxErr/n.Flux, r.FluxErr/r.Flux)
		ratios = append(ratios, ratio{n.Flux / r.Flux, 1 / (e*e + floor*floor)})
	}
	if len(ratios) < 5 {
		return p.FluxScale, p.FluxScaleErr, 0
	}
	sort.Slice(ratios, func(a, b int) bool { return ratios[a].value < ratios[b].value })
	total := 0.0
	for _, r := range ratios {
		total += r.weight
	}
	half := 0.0
	median := ratios[0].value
	for _, r := range ratios {
		half += r.weight
		median = r.value
		if half >= total/2 {
			break
		}
	}
	// Mean of the stars within three sigma of the median, their own or the
	// sample's, whichever is wider.
	deviations := make([]float64, len(ratios))
	for i, r := range ratios {
		deviations[i] = math.Abs(r.value/median - 1)
	}
	sort.Float64s(deviations)
	spread := 1.4826 * deviations[len(deviations)/2]
	var sum, weight float64
	for _, r := range ratios {
		if math.Abs(r.value/median-1) < 3*math.Max(spread, 1/math.Sqrt(r.weight)) {
			sum += r.weight * r.value
			weight += r.weight
			used++
		}
	}
	return sum / weight, spread * median / math.Sqrt(float64(used)), used
}
