package subtract

import (
	"nightsift/internal/artefacts"
	"nightsift/internal/frame"
	"nightsift/internal/psf"
	"nightsift/internal/stars"
)

// Difference is what remains of a new frame when the reference, brought to the
// same point-spread function, is taken away. All planes lie on the new frame's
// pixel grid.
type Difference struct {
	// Frame is the new frame: its header values, flags as read and WCS as
	// fitted. Frame.Image holds the original counts.
	Frame *frame.Frame

	// Image is the difference in counts of the new frame, whitened: its noise
	// is independent from pixel to pixel, with the variance in Variance
	// [count²]. Flagged pixels hold 0.
	Image    *frame.Image
	Variance *frame.Image

	// Significance is the matched-filter score: N(0,1) where the sky is empty.
	// It is 0 where Flags has a bit of frame.Unusable or frame.Edge.
	Significance *frame.Image

	// Flags joins the flags of both frames, grown by the footprint of the
	// kernels where a flagged pixel carries weight.
	Flags *frame.Mask

	// PSF is the point-spread function of Image: a source of f counts in the
	// new frame appears in Image as f times PSF. Because of the whitening its
	// sum over a stamp may differ a little from one.
	PSF *psf.Grid

	// New and Reference are the two inputs as compared, sky subtracted, in
	// counts of the new frame, for stamps and for what stands beneath.
	New       *frame.Image
	Reference *frame.Image

	// ReferenceStars are the sources on the reference at their places on the
	// new frame [FITS pixels], fluxes in counts of the new frame.
	ReferenceStars []stars.Star

	// Artefacts says what was found on the new frame that is no light from the
	// sky. It is nil for a difference read from a file, whose Flags and Info
	// hold the outcome.
	Artefacts *artefacts.Report

	// Injected marks a difference with light that was put in to measure the
	// efficiency. It is never written, and what is found on it carries names by
	// which the catalogue refuses it.
	Injected bool

	Info Info
}

// Info is what the subtraction measured and decided; it goes into the headers
// of the product and into the table of frames.
type Info struct {
	Method          string // how the two frames were brought to one PSF: "kernel" or "proper"
	MethodReason    string // why this way, as a sentence
	Direction       string // "reference" or "both": which frames were convolved
	DirectionReason string // the measure behind the choice, as a sentence

	ReferenceName     string
	ReferenceChecksum string

	FWHMNew        float64 // px, of the new frame's PSF at its centre
	FWHMReference  float64 // px of the new frame's grid
	FluxScale      float64 // counts of the new frame for one of the reference
	FluxScaleStars int     // stars behind it; 0: from the star lists alone
	Sky            float64 // count, median over the new frame
	SkyNoise       float64 // count, median white noise of a pixel
	ZeroPoint      float64 // mag of one count in the new frame; NaN if unknown
	// ZeroPointSource says in words where ZeroPoint came from, and why a
	// catalogue was not used. What follows is of a catalogue's stars: NaN, 0 and empty without.
	ZeroPointSource   string
	ZeroPointChecksum string  // SHA-256 of the catalogue's file
	ZeroPointErr      float64 // mag, 1 sigma
	ZeroPointScatter  float64 // mag, of the stars beyond their errors
	ZeroPointStars    int
	ZeroPointClipped  int     // stars left out as outliers
	ColourTerm        float64 // magnitudes of ZeroPoint for one of colour
	ColourTermErr     float64 // 0 for a fixed one

	MagLimit5  float64 // mag of a point source of five sigma, median over the frame; NaN without zero point
	FluxLimit5 float64 // count, the same as a flux

	StarsMatched     int
	AstrometryRMS    float64 // px per axis
	StarsPSFNew      int
	StarsPSFRef      int
	KernelStamps     int     // stamps used in the last round of the solve
	KernelClipped    int     // stamps clipped as outliers
	KernelChi2       float64 // reduced chi-square of the stamps kept
	KernelBasis      string  // gaussian or pixel
	KernelOrder      int     // spatial order of the kernel
	KernelTerms      int     // unknowns of the solve
	KernelSum        float64 // sum of the kernel at the frame's centre: the flux scale
	KernelSumRMS     float64 // relative change of that sum over the frame
	Condition        float64 // condition number of the scaled normal matrix
	NoiseRatio       float64 // robust spread of SIGNIFICANCE on empty sky, as it is
	NoiseScale       float64 // by which the frames' noise was multiplied, after a look at the difference, where it is not white; else 1
	SignificanceMean float64 // mean of SIGNIFICANCE on empty sky
	NoiseSource      string  // "model", "extension", "measured" or "difference": where the sky variance came from
	ModelNoise       float64 // count, from gain, read noise and sky; NaN if unknown
	MeasuredNoise    float64 // count, from the pixels
	JitterPx         float64 // px, astrometric residual left at bright stars
	ShapeError       float64 // relative residual that only sharp light leaves there
	ScaleError       float64 // relative residual of the kernel at bright stars
	StarChi2         float64 // median chi-square per pixel in the cores of bright stars
	StarsProbed      int
	Hits, HitPixels  int // particle hits and hot pixels found on the new frame
	Trails           int // of satellites and aircraft
	BadLines         int // columns and rows
	UsablePixels     int // pixels in which SIGNIFICANCE was computed
}
