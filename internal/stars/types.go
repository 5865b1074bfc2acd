// Package stars measures the sky of a frame and lists its stars.
//
// EstimateBackground gives the sky and the white noise of a pixel on a mesh of
// cells and interpolates both; EstimateVariance turns them into a variance
// plane; Find lists the stars of a sky-subtracted frame with centroids, fluxes
// and shapes, and marks those from which a point-spread function can be learnt.
//
// Positions are FITS pixel coordinates: (1,1) is the centre of the first pixel.
//
// Sources of the methods: adaptive (window-weighted) moments and their
// deconvolution from the window, Bernstein & Jarvis 2002, AJ 123, 583; the
// bound on centroid errors, King 1983, PASP 95, 163; the skewness correction
// of a clipped mean, Pearson 1895, Phil. Trans. A 186, 343; the profile, Moffat
// 1969, A&A 3, 455.
package stars

import (
	"math"

	"nightsift/internal/frame"
)

// BackgroundConfig says how the sky is measured. Start from
// DefaultBackgroundConfig.
type BackgroundConfig struct {
	Mesh      int     // px, wanted side of a cell; must be several times the PSF's FWHM
	Threshold float64 // sources above so many sigma (of a smoothed frame) are masked
	Passes    int     // rounds of masking and measuring
}

// DefaultBackgroundConfig returns cells of 64 px, a threshold of 3 sigma and
// three rounds.
func DefaultBackgroundConfig() BackgroundConfig {
	return BackgroundConfig{Mesh: 64, Threshold: 3, Passes: 3}
}

// Background is the sky of one frame and its white noise, both on a mesh of
// NX × NY cells. Cell (cx,cy) is element cy*NX+cx; the values hold at the
// centres of the cells and are interpolated between them by cubics with
// finite-difference slopes, which do not ring.
//
// A Background is read-only after it was made: any number of goroutines may
// use it at once.
type Background struct {
	Width, Height int // px, the frame's
	NX, NY        int // cells

	SkyMesh []float32 // count, NX*NY
	// NoiseMesh is the white noise of one pixel (1 sigma) [count], NX*NY. Where
	// the frame's noise is not white (see Correlation), it is that of white
	// noise with as much power at the scale of a star.
	NoiseMesh []float32

	MedianSky    float64 // count, median over the cells
	MedianNoise  float64 // count, median over the cells of NoiseMesh
	ClippedNoise float64 // count, median over the cells of the plain clipped standard deviation
	// NoiseRatio is ClippedNoise over the noise that differences of neighbouring
	// pixels show: 1 for white noise, above 1 where noise is correlated from
	// pixel to pixel or unresolved sources add to it, NaN when the background was rebuilt from its mesh.
	NoiseRatio float64
	// Correlation is that of second differences two pixels apart, median over
	// the cells: 1/6 for white noise, negative where pixels were interpolated;
	// NaN where unknown.
	Correlation float64

	Masked      float64 // fraction of the usable pixels masked as sources
	FilledCells int     // cells without enough sky of their own, filled from neighbours

	// coarse is the noise at the scale of a star over that of single pixels,
	// where their correlation leaves room for more than 1; else 0.
	coarse float64
	xc, yc []float64 // 0-based centres of the cells
	floor  float32   // count, noise is never given below this
}

// Star is one source of a frame.
type Star struct {
	X, Y       float64 // FITS pixels
	XErr, YErr float64 // px, 1 sigma, from the noise of sky and source
	Flux       float64 // count, total of a point source
	FluxErr    float64 // count, 1 sigma
	Peak       float64 // count above the sky, brightest pixel within the core
	SN         float64 // Flux/FluxErr
	FWHM       float64 // px, of the profile before integration over pixels; NaN when not measurable
	// Second moments [px²] weighted by a round Gaussian window as wide as the
	// frame's PSF and then freed from that window, so that a Gaussian source
	// gives its own moments. They include the pixel's own 1/12 px² on the
	// diagonal. NaN when the source is too faint or too sharp for them.
	Mxx, Myy, Mxy float64
	Roundness     float64 // minor to major axis, 0…1; NaN without moments
	Flags         frame.Flag
	Neighbour     float64 // px to the nearest source with more than 3 % of this one's flux; +Inf if there is none
	Extended      bool    // no single star: wider or longer than the frame's stars, beyond the noise, or on other light
	Clean         bool    // fit to learn a PSF from: star-like, isolated, unflagged, bright enough
}

// List is what Find found, bright first.
type List struct {
	Stars []Star

	FWHM      float64 // px, median of the clean stars (of all if fewer than five are clean); NaN without any
	Roundness float64 // median of the same stars
	Clean     int     // number of clean stars
	Sharp     int     // sources thrown away because they are sharper than the PSF (cosmic-ray hits)
	Window    float64 // px, sigma of the Gaussian window of the moments
}

// FindConfig says how stars are found. Start from DefaultFindConfig.
type FindConfig struct {
	Threshold float64 // sigma, of a peak after the matched filter
	FWHM      float64 // px, of the PSF; NaN: measured from bright peaks
	CleanSN   float64 // lowest signal to noise of a clean star
	MaxStars  int     // the brightest so many are kept
}

// DefaultFindConfig returns a threshold of 5 sigma, a measured FWHM, clean
// stars from signal to noise 20 and at most 100,000 stars.
func DefaultFindConfig() FindConfig {
	return FindConfig{Threshold: 5, FWHM: math.NaN(), CleanSN: 20, MaxStars: 100000}
}

// Correlated reports whether the measured noise is not white, so that its size
// at the scale of a star is an estimate.
func (r *VarianceReport) Correlated() bool { return r.Correlation < correlated }

// VarianceReport says what EstimateVariance compared and chose.
type VarianceReport struct {
	Source        string  // "model", "extension" or "measured": what filled the plane
	Reason        string  // a sentence
	ModelNoise    float64 // count, median from gain, read noise and sky; NaN if unknown
	MeasuredNoise float64 // count, median white noise of the pixels
	ClippedNoise  float64 // count, median clipped standard deviation of the pixels
	Correlation   float64 // of the measured noise, as Background.Correlation
	SkyGain       float64 // electron/count that would explain the measured noise by the sky's photons alone; NaN if the sky is not positive
}
