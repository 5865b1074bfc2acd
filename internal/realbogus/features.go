// Package realbogus turns what was measured of a candidate into the
// probability that it is a real change on the sky.
//
// A small model, gradient-boosted shallow trees (Friedman 2001, Ann. Statist.
// 29, 1189; second-order gain after Friedman, Hastie & Tibshirani 2000, Ann.
// Statist. 28, 337), scores 33 features with a physical meaning. Its score is
// calibrated on frames it has not seen (Platt 1999; isotonic regression by
// pooling adjacent violators, Ayer et al. 1955, Ann. Math. Statist. 26, 641).
// Posterior then adds what the score cannot know: how many peaks of plain
// Gaussian noise to expect at that significance, from the closed form for
// maxima of a smooth random field, against how many real sources.
package realbogus

import "math"

// Count is the number of features.
const Count = 33

// Features is what the model sees of one candidate, in the order of Names.
// Values are finite; clean makes them so.
type Features [Count]float64

// Indices into Features.
const (
	LogSN = iota
	Sign
	Chi2Excess
	Size
	SizeSig
	Elongation
	ElongationSig
	HitMargin
	BroadMargin
	TrailMargin
	DipoleMargin
	Oppose
	DipoleSum
	Contradicts
	Flagged
	SaturationDistance
	ReferenceContrast
	StarDistance
	StarGlare
	ExpectedResidual
	Crowding
	Absorbed
	EdgeDistance
	Offset
	NewFlux
	ResidueMargin
	ResidueShift
	KeptSN
	KeptFraction
	Surround
	LitSurround
	HaloDistance
	Width
)

// Description tells what a feature is. Low and High bound its value. Trend is
// +1 for one of which more, all else equal, can only speak for a real change,
// -1 for one of which more can only speak against it, 0 for others.
type Description struct {
	Name, Meaning string
	Low, High     float64
	Trend         int
}

// Descriptions lists the features in order.
var Descriptions = [Count]Description{
	LogSN:              {"log_sn", "log10 of the absolute peak significance", 0, 5, 0},
	Sign:               {"sign", "+1 brighter than the reference, -1 fainter", -1, 1, 0},
	Chi2Excess:         {"chi2_excess", "log10 of the reduced chi-square of the point source, or of a trail that explains much more, 2 % of the PSF allowed for: residues and artefacts fit badly", -2, 4, -1},
	Size:               {"size", "excess variance of the profile in units of the PSF's: hits are negative, residues of galaxies positive", -3, 5, 0},
	SizeSig:            {"size_sig", "asinh of the significance of that excess", -8, 8, 0},
	Elongation:         {"elongation", "excess variance of one axis over the other, PSF units: trails and tracks", 0, 5, 0},
	ElongationSig:      {"elongation_sig", "asinh of its significance", 0, 8, 0},
	HitMargin:          {"hit_margin", "by how much a few single pixels explain the data better than the PSF (or that trail), criterion difference over squared significance", -2, 2, -1},
	BroadMargin:        {"broad_margin", "the same for a blurred PSF", -2, 2, -1},
	TrailMargin:        {"trail_margin", "the same for a trailed PSF; 0 where none was tried", -2, 2, 0},
	DipoleMargin:       {"dipole_margin", "the same for two sources of opposite sign; 0 where there is no other sign", -2, 2, -1},
	Oppose:             {"oppose", "flux of the other sign over the flux, 0 for none: bad registration", 0, 2, -1},
	DipoleSum:          {"dipole_sum", "net over total flux of the pair, 1 where there is no pair: 0 is a pure dipole", 0, 1, 1},
	Contradicts:        {"contradicts", "fraction of the core's pixels beyond 3 sigma of the wrong sign", 0, 1, -1},
	Flagged:            {"flagged", "fraction of the PSF's weight on pixels that cannot be used", 0, 1, -1},
	SaturationDistance: {"saturation_distance", "log10(1 + distance of the nearest saturated or bled pixel / FWHM)", 0, 1.4, 1},
	ReferenceContrast:  {"reference_contrast", "log10 of the flux over the reference's flux beneath it", -4, 4, 0},
	StarDistance:       {"star_distance", "distance of the nearest reference source in FWHM, at most 10", 0, 10, 0},
	StarGlare:          {"star_glare", "largest log10(flux of a reference source / flux) - distance / 2 FWHM around", -5, 6, -1},
	ExpectedResidual:   {"expected_residual", "log10 of significance over what errors of scale and registration leave of the reference beneath", -4, 5, 1},
	Crowding:           {"crowding", "log10(1 + other peaks within 12 FWHM): residues come in crowds", 0, 3, -1},
	Absorbed:           {"absorbed", "log10(1 + peaks that count as side lobes of this one)", 0, 3, -1},
	EdgeDistance:       {"edge_distance", "log10(1 + distance to the frame's border / FWHM)", 0, 1.4, 1},
	Offset:             {"offset", "distance of the fitted place from the peak, in FWHM", 0, 2, 0},
	NewFlux:            {"new_flux", "PSF flux in the new frame alone over the absolute flux: a real new light is there, a hole in the frame is not", -3, 3, 0},
	ResidueMargin:      {"residue_margin", "by how much the reference's own light, shifted and scaled a little, explains the data better than the PSF, criterion difference over squared significance; 0 without a reference", -2, 2, -1},
	ResidueShift:       {"residue_shift", "px, the shift that this takes", 0, 2, 0},
	KeptSN:             {"kept_sn", "log10 of the significance that is left to the point source when such a shift and scale are fitted with it", -1, 5, 1},
	KeptFraction:       {"kept_fraction", "the same over the peak significance", -1, 1.5, 1},
	Surround:           {"surround", "log10 of the spread of SIGNIFICANCE from 2 to 5 FWHM around: 0 where the subtraction is as good as its noise", -1, 2, -1},
	LitSurround:        {"lit_surround", "the same where the reference has light, within 10 FWHM: bad registration or a bad kernel", -1, 2, -1},
	HaloDistance:       {"halo_distance", "least distance of a reference source in units of the radius at which its light sinks into the noise, at most 10: rings and spikes", 0, 10, 1},
	Width:              {"width", "log10 of the FWHM in px: hits look like stars where stars are sharp", 0, 2, 0},
}

// Names lists the features' names in order.
func Names() []string {
	n := make([]string, Count)
	for i := range n {
		n[i] = Descriptions[i].Name
	}
	return n
}

// Clean forces every value into its bounds. NaN becomes 0 or, where 0 lies
// outside, the nearer bound.
func (f *Features) Clean() {
	for i := range f {
		d := &Descriptions[i]
		if math.IsNaN(f[i]) {
			f[i] = 0
		}
		f[i] = math.Max(d.Low, math.Min(d.High, f[i]))
	}
}
