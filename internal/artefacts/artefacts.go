// Package artefacts finds, on one exposure alone, what is no light from the
// sky, and sets the bits of its flag plane: hits of charged particles, hot and
// dead pixels, bad columns and rows, trails of satellites and aircraft, and
// saturated plateaus that no header announced.
//
// # What light permits
//
// All light reaches the detector through the point-spread function (PSF), so a
// frame is a sum of PSFs with positive weights, whatever is on the sky: stars,
// blends, galaxies, diffraction spikes. A linear combination of pixels that is
// not positive for one PSF at any position is therefore not positive for any
// frame, noise aside. For a pixel c and the two pixels a, b at equal distances
// on both sides
//
//	c - q (a + b) ≤ 0,  q = max over positions of PSF(c) / (PSF(a) + PSF(b)).
//
// Limits holds q for several directions and distances. A pixel that breaks one
// of these bounds by more than its noise is a hit. Likewise a pixel far below
// its neighbours is dead, and a column that stands above both its neighbours
// over a long run is bad.
//
// # Sources
//
// The first sieve is the sub-sampled Laplacian of van Dokkum 2001, PASP 113,
// 1420, in closed form; his test of fine structure is replaced by the bounds
// above, which need no limit set by hand for undersampled frames. Trails are
// found with the fast Radon transform of Brady 1998, SIAM J. Comput. 27, 107
// (Götz & Druckmüller 1996, Pattern Recognition 29, 711), whose intermediate
// steps are sums over short segments, as used for streaks by Nir, Zackay &
// Ofek 2018, AJ 156, 229. Runs of a column are found as the largest sums of
// consecutive terms, after Page 1954, Biometrika 41, 100.
//
// # Conventions
//
// Positions handed out are FITS pixel coordinates: (1,1) is the centre of the
// first pixel. Nothing here keeps state: many goroutines may call Find, each
// with its own flag plane. Everything runs on the calling goroutine in a fixed
// order, so equal inputs give equal flags.
package artefacts

import (
	"fmt"
	"math"

	"nightsift/internal/frame"
	"nightsift/internal/stars"
)

// Config says what is sought and how. Start from DefaultConfig: the zero value
// is not usable.
type Config struct {
	Off          bool    // look for nothing: for frames that were cleaned before, and to see what is left without it
	HitSigma     float64 // excess over what light permits, of the first pixel of a hit [sigma]
	GrowSigma    float64 // the same, of pixels that touch a hit
	DeadSigma    float64 // deficit of a dead pixel [sigma]
	LimitMargin  float64 // relative allowance on what the PSF permits
	ColumnSum    float64 // least sum along a bad column or row of clipped, noise-normalised excess
	StreakSigma  float64 // significance of a trail's sum along its length
	StreakLength float64 // px, shortest trail
	MaxStreaks   int     // no more trails than this are taken from one frame
	Plateaus     bool    // look for saturated plateaus that are not flagged yet
}

// DefaultConfig returns the values with which the tests of this package are
// made: hits from 6 sigma, grown to 3 sigma, trails from 10 sigma.
func DefaultConfig() Config {
	return Config{
		HitSigma: 6, GrowSigma: 3, DeadSigma: 7, LimitMargin: 0.06, ColumnSum: 70,
		StreakSigma: 10, StreakLength: 150, MaxStreaks: 8, Plateaus: true,
	}
}

// Input is one exposure as Find wants it.
type Input struct {
	Image    *frame.Image // count, without sky
	Variance *frame.Image // count², of the sky alone
	Flags    *frame.Mask  // bits are added
	Counts   *frame.Image // count, as read, with sky; may be nil: plateaus are then sought on Image
	FWHM     float64      // px, of the PSF before integration over pixels; NaN if unknown
	Gain     float64      // electron per count; NaN if unknown: estimated from sky and variance, else 1
	PSF      Renderer     // the measured PSF; nil: bounds follow from FWHM and Stars
	Stars    []stars.Star // the frame's stars, bright first; may be nil
}

// Renderer draws a point-spread function; *psf.Model is one.
type Renderer interface {
	// Radius returns the half size of a stamp: it has 2·Radius+1 px on a side.
	Radius() int
	// Render writes the PSF at field position (x,y), shifted by (dx,dy) px
	// from the stamp's centre.
	Render(dst []float32, x, y, dx, dy float64)
}

// Line is a bad column or row, or a part of one.
type Line struct {
	Row      bool // a row; else a column
	At       int  // FITS coordinate of the column (x) or row (y)
	From, To int  // FITS coordinates of its first and last bad pixel along it
	Dead     bool // below the sky; else above what light permits
}

// Streak is a straight trail.
type Streak struct {
	X0, Y0, X1, Y1 float64 // FITS px, ends on the axis, X0 ≤ X1
	Angle          float64 // deg from +x towards +y, in (-90,90]
	Length         float64 // px, within the frame
	FWHM           float64 // px, across
	HalfWidth      float64 // px, half width of what is flagged
	Peak           float64 // count per px on the axis, above the sky
	Brightness     float64 // count per px of length
	SN             float64 // signal to noise of the whole trail
	WholeFrame     bool    // both ends leave the frame
}

// Report says what was found.
type Report struct {
	Hits      int      // connected groups of hit pixels
	HitPixels int      // pixels flagged CosmicRay
	Hot       int      // groups of a single pixel: hot, or a very small hit
	Dead      int      // single pixels without response, flagged BadColumn
	Lines     []Line   // bad columns and rows
	Streaks   []Streak // the most significant first
	Plateaus  int      // connected groups of saturated pixels found without a header's help
	Saturated float64  // count, the level of those; NaN without any
	Limits    Limits   // the bounds used
	Gain      float64  // electron per count used
	Notes     []string // what was given up, and why
}

// Find looks at one frame and adds bits to in.Flags: CosmicRay for hits and
// hot pixels, BadColumn for columns, rows and dead pixels, Streak for trails,
// Saturated and Bleed for plateaus. Pixels that are not finite, have no
// positive variance or carry an Unusable bit are not looked at and support no
// judgement about others.
//
// An error is returned for a configuration that cannot work. Planes of unequal
// shape are the caller's mistake: Find panics.
func Find(in Input, cfg Config) (*Report, error) {
	if in.Image == nil || in.Variance == nil || in.Flags == nil {
		panic("artefacts: Image, Variance and Flags must be given")
	}
	w, h := in.Image.Width, in.Image.Height
	if !in.Image.SameShape(in.Variance) || in.Flags.Width != w || in.Flags.Height != h || in.Counts != nil && !in.Image.SameShape(in.Counts) {
		panic(fmt.Sprintf("artefacts: planes differ in shape: image %d×%d, variance %d×%d, flags %d×%d", w, h, in.Variance.Width, in.Variance.Height, in.Flags.Width, in.Flags.Height))
	}
	for _, c := range []struct {
		name  string
		value float64
		least float64
	}{{"HitSigma", cfg.HitSigma, 3}, {"GrowSigma", cfg.GrowSigma, 1.5}, {"DeadSigma", cfg.DeadSigma, 3},
		{"ColumnSum", cfg.ColumnSum, 20}, {"StreakSigma", cfg.StreakSigma, 4}, {"StreakLength", cfg.StreakLength, 32}, {"LimitMargin", cfg.LimitMargin, 0}} {
		if !(c.value >= c.least) {
			return nil, fmt.Errorf("artefacts: %s is %g: want at least %g", c.name, c.value, c.least)
		}
	}
	r := &Report{Saturated: math.NaN()}
	f := &finder{in: in, cfg: cfg, w: w, h: h, img: in.Image.Pix, vari: in.Variance.Pix, bits: in.Flags.Bits, report: r}
	f.chooseGain()
	if cfg.Off {
		return r, nil
	}
	if cfg.Plateaus {
		f.plateaus()
	}
	f.chooseLimits()
	f.lines()
	f.deadPixels()
	f.hits()
	f.streaks()
	return r, nil
}

// finder is the state of one call of Find.
type finder struct {
	in     Input
	cfg    Config
	w, h   int
	img    []float32
	vari   []float32
	bits   []frame.Flag
	gain   float64
	fwhm   float64 // px, of the sharpest stars
	limits Limits
	report *Report
}

const maxFloat32 = math.MaxFloat32

// usable reports a pixel whose value may support a judgement.
func (f *finder) usable(k int) bool {
	v, s := f.img[k], f.vari[k]
	return f.bits[k]&frame.Unusable == 0 && v >= -maxFloat32 && v <= maxFloat32 && s > 0 && s <= maxFloat32
}

// chooseGain takes the gain as given, or the one that explains the variance by
// the sky's photons alone. Read noise makes that one too small, which makes
// source noise too large: the bounds become wider, not narrower.
func (f *finder) chooseGain() {
	g := f.in.Gain
	if !(g > 0) || math.IsInf(g, 0) {
		g = 1
		if f.in.Counts != nil {
			var sky, vari float64
			step := max(1, len(f.img)/20000)
			for k := 0; k < len(f.img); k += step {
				if s := float64(f.in.Counts.Pix[k] - f.img[k]); f.usable(k) && s > 0 && s < 1e9 {
					sky += s
					vari += float64(f.vari[k])
				}
			}
			if sky > 0 && vari > 0 {
				g = sky / vari
			}
		}
	}
	f.gain, f.report.Gain = g, g
}
