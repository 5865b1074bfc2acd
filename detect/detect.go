// Package detect finds, measures and classifies what changed on a difference.
//
// Peaks of both signs in the matched-filter significance, interpolated between
// pixels, become candidates when no brighter peak explains them. Peaks that
// lie on one line become one streak. What remains is fitted in groups: flux and
// place of all members together with the difference's own PSF, by Gauss–Newton
// iteration with weights from the noise model, so that fluxes have no bias and
// errors are the scatter. Around each source a point source is compared with a
// few single pixels, a dipole, a trail and a blurred profile by an information
// criterion. The context on both frames and the fit become features, and a
// small model turns those into a probability (package realbogus).
//
// Sources: least squares with a known PSF, Stetson 1987, PASP 99, 191; its
// bound on positions, King 1983, PASP 95, 163; noise bias of maximised
// estimates, Box 1971, J. R. Statist. Soc. B 33, 171, and Refregier et al.
// 2012, MNRAS 425, 1951; information criterion, Schwarz 1978, Ann. Statist. 6,
// 461; spline interpolation, Unser et al. 1993, IEEE Trans. Signal Process. 41,
// 834; peaks of random fields, Adler 1981 and Bond & Efstathiou 1987, MNRAS
// 226, 655.
//
// Measured on invented sources (fit_test.go): flux bias below 0.2 % at S/N 20
// to 100, spread of pulls 0.97 to 1.03, positions at the Cramér–Rao bound.
package detect

import (
	"context"
	"fmt"
	"math"

	"nightsift/internal/astro"
	"nightsift/internal/realbogus"
	"nightsift/subtract"
)

// Detect returns the candidates of a difference, bright first. A difference
// that cannot be searched gives a *frame.Problem; a cancelled ctx its error.
// The same difference and configuration give the same candidates and
// identifiers. It does not change d and may run for many differences at once.
func Detect(ctx context.Context, d *subtract.Difference, cfg Config) ([]Candidate, error) {
	if err := cfg.Check(); err != nil {
		return nil, err
	}
	model := cfg.Model
	if model == nil {
		var err error
		if model, err = realbogus.Shipped(); err != nil {
			return nil, err
		}
	}
	f := d.Frame
	in := &input{
		image: d.Image, variance: d.Variance, significance: d.Significance,
		newSub: d.New, reference: d.Reference, flags: d.Flags, psf: d.PSF,
		gain: f.Meta.Gain, zeroPoint: d.Info.ZeroPoint,
		scaleError: d.Info.ScaleError, jitter: d.Info.JitterPx, pixelScale: math.NaN(),
	}
	for i := range d.ReferenceStars {
		s := &d.ReferenceStars[i]
		if !math.IsNaN(s.X + s.Y) {
			in.places = append(in.places, place{s.X, s.Y, s.Flux})
		}
	}
	if w := f.WCS; w != nil {
		in.pixelScale = w.PixelScale()
		in.sky = func(x, y float64) (ra, dec float64, ok bool) {
			ra, dec, err := w.PixelToSky(x, y)
			return ra, dec, err == nil
		}
	}
	s, err := newSearch(in, &cfg, model)
	if err != nil {
		return nil, err
	}
	list, err := s.run(ctx)
	if err != nil {
		return nil, err
	}
	night := ""
	if !math.IsNaN(f.Meta.MidMJD) {
		night = astro.NightOf(f.Meta.MidMJD, cfg.Longitude)
	}
	seen := map[string]int{}
	for k := range list {
		c := &list[k]
		c.Frame, c.Filter, c.MidMJD, c.Night = f.Name, f.Meta.Filter, f.Meta.MidMJD, night
		c.ID = identify(f.Name, f.Checksum, d.Info.ReferenceName, d.Info.ReferenceChecksum, c.X, c.Y)
		if d.Injected {
			c.ID = InjectedPrefix + c.ID
		}
		// Two candidates in one half pixel: the fainter gets a number.
		if n := seen[c.ID]; n > 0 {
			seen[c.ID]++
			c.ID = fmt.Sprintf("%s-%d", c.ID, n+1)
		} else {
			seen[c.ID] = 1
		}
	}
	return list, nil
}

// NoisePeaks returns the number of candidates of both signs that plain
// Gaussian noise is expected to give above a threshold [sigma] on a
// difference: the closed form of realbogus.PeakDensity times the pixels
// searched.
func NoisePeaks(d *subtract.Difference, threshold float64) float64 {
	x, y := float64(d.Image.Width+1)/2, float64(d.Image.Height+1)/2
	guess := psfScale(d.PSF, x, y)
	if !(guess > 0.5 && guess < 60) {
		return math.NaN()
	}
	p := newLocalPSF(d.PSF, x, y, guess, stampRadius(guess))
	return 2 * float64(d.Info.UsablePixels) * realbogus.PeakDensity(p.rootDet(), threshold)
}
