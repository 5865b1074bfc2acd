package realbogus

import "math"

// PeakDensity returns the expected number of local maxima above u sigma per
// pixel of a smooth, zero-mean, unit-variance Gaussian field,
//
//	N(>u) = √det Λ · (2π)^(-3/2) · u · exp(-u²/2),
//
// with Λ the covariance matrix of the field's gradient [px⁻²]: minus the
// second derivatives of the autocorrelation at zero. A matched filter with a
// Gaussian PSF of sigma s gives √det Λ = 1/(2 s²). This is the expected Euler
// characteristic of the excursion set (Adler 1981, The Geometry of Random
// Fields, ch. 6), which for u ≥ 3 equals the density of maxima (Bardeen et al.
// 1986, ApJ 304, 15; two dimensions: Bond & Efstathiou 1987, MNRAS 226, 655)
// to better than 1 %. Minima below -u are as many.
func PeakDensity(rootDet, u float64) float64 {
	return rootDet * 0.06349363593424097 * u * math.Exp(-u*u/2)
}

// PeakDensityAt returns the density of maxima per pixel and per sigma of
// height at u: minus the derivative of PeakDensity.
func PeakDensityAt(rootDet, u float64) float64 {
	return math.Max(0, rootDet*0.06349363593424097*(u*u-1)*math.Exp(-u*u/2))
}

// Rates says how many real changes to expect.
type Rates struct {
	// RealPerMpx is the number of real changes per million pixels above
	// Threshold, both signs together.
	RealPerMpx float64
	// DefectsPerMpx is the number of detections per million pixels that are
	// neither real nor plain noise. It matters to models that were not trained in
	// the survey itself: see Model.Here.
	DefectsPerMpx float64
	// Slope is that of the counts, N(>s) ∝ s^-Slope: 1.5 for sources spread
	// evenly through space.
	Slope     float64
	Threshold float64 // sigma
}

// DefaultRates returns two real changes per million pixels above five sigma:
// between a high-latitude field (a few tenths) and the ecliptic or the Milky
// Way (ten and more); and five defects per million pixels. The frames of all
// scenarios hold 4.6 (19 in "dirty", none to 2 in most), by the bogus of
//
//	maketrained -worn 0 -frames 2 -size 640 -seed 7400001
func DefaultRates() Rates {
	return Rates{RealPerMpx: 2, DefectsPerMpx: 5, Slope: 1.5, Threshold: 5}
}

// At returns the expected density of real changes of one sign per pixel and
// per sigma at significance s.
func (r Rates) At(s float64) float64 {
	s = math.Max(s, 1)
	return 0.5e-6 * r.RealPerMpx * r.Slope / r.Threshold * math.Pow(s/r.Threshold, -r.Slope-1)
}

// Posterior joins the model's probability q, which weighs real changes
// against defects of the data by their form, with the chance that plain noise
// made a peak of |significance| s. Noise looks like a point source; only its
// number tells. rootDet is that of PeakDensity.
func Posterior(q, s, rootDet float64, rates Rates) float64 {
	q = math.Max(1e-6, math.Min(1-1e-6, q))
	real := rates.At(math.Abs(s))
	if !(real > 0) {
		return 0
	}
	return 1 / (1 + (1-q)/q + PeakDensityAt(rootDet, math.Abs(s))/real)
}
