package photometry

import (
	"errors"
	"fmt"
	"math"

	"nightsift/internal/robust"
)

// Settings say how magnitudes and fluxes are compared. Start from
// DefaultSettings.
type Settings struct {
	// ColourTerm is the coefficient of the colour; with FitColour it is fitted
	// where the stars allow, and 0 where they do not.
	ColourTerm float64
	FitColour  bool
	// SourceColour [mag] is the colour of the sources for which magnitudes
	// shall hold.
	SourceColour float64

	MinStars   int     // fewest stars
	MaxScatter float64 // mag, largest scatter of the stars beyond their errors
}

// DefaultSettings returns no colour term, at least 5 stars and a scatter of at
// most 0.2 mag.
func DefaultSettings() Settings { return Settings{MinStars: 5, MaxScatter: 0.2} }

// Measured is one star of the catalogue with its flux on the frame.
type Measured struct {
	Mag, MagErr   float64 // MagErr NaN if unknown
	Colour        float64 // NaN if unknown
	Flux, FluxErr float64 // count
}

// Result is the zero point of a frame. Without one, Refusal says why and the
// numbers are NaN.
type Result struct {
	ZeroPoint, Err            float64 // mag of one count at the source colour, 1 sigma
	ColourTerm, ColourTermErr float64 // ColourTermErr is 0 for a fixed one
	Scatter                   float64 // mag, of the stars beyond their errors
	Stars                     int     // that entered the last fit
	Clipped                   int     // left out as outliers
	FittedColour              bool
	Note, Refusal             string
	Covariance                float64 // mag², of zero point and colour term
	ChiSquare                 float64 // of the last fit
}

// What a fit of the colour term needs.
const (
	leastColourStars  = 20
	leastColourSpread = 0.1 // mag, half of the range of the middle 68 %
)

// leastScatter is assumed at least: a flat field is never perfect. [mag]
const leastScatter = 0.002

// clipAt is the departure, in standard deviations, beyond which a star is left
// out. It is widened by the factor 1 + clipFew/(degrees of freedom): the
// standard deviation of few stars is itself uncertain.
const (
	clipAt  = 3.5
	clipFew = 5
)

// Calibrate finds the zero point. What the data do not allow is in
// Result.Refusal.
func Calibrate(list []Measured, s Settings) Result {
	r := Result{ZeroPoint: math.NaN(), Err: math.NaN(), ColourTerm: math.NaN(), ColourTermErr: math.NaN(), Scatter: math.NaN()}
	var y, variance, colour []float64
	noColour := 0
	for _, m := range list {
		v := m.Mag + 2.5*math.Log10(m.Flux)
		e := 2.5 / math.Ln10 * m.FluxErr / m.Flux
		if !(m.Flux > 0 && e > 0) || math.IsNaN(v) || math.IsInf(v, 0) || math.IsInf(e, 0) {
			continue
		}
		c := m.Colour - s.SourceColour
		if c != c && (s.FitColour || s.ColourTerm != 0) {
			noColour++
			if !s.FitColour {
				continue
			}
		}
		if m.MagErr > 0 {
			e = math.Hypot(e, m.MagErr)
		}
		y, variance, colour = append(y, v), append(variance, e*e), append(colour, c)
	}
	fit := false
	if s.FitColour {
		known := robust.DropNaN(append([]float64(nil), colour...))
		spread := 0.5 * (robust.Percentile(known, 84) - robust.Percentile(known, 16))
		switch {
		case len(known) < leastColourStars:
			r.Note = fmt.Sprintf("no colour term: %d stars have a colour, a fit needs %d", len(known), leastColourStars)
		case !(spread >= leastColourSpread):
			r.Note = fmt.Sprintf("no colour term: the colours spread over %.3f mag, a fit needs %.1f", spread, leastColourSpread)
		default:
			fit = true
			n := 0
			for i, c := range colour {
				if c == c {
					y[n], variance[n], colour[n] = y[i], variance[i], c
					n++
				}
			}
			y, variance, colour = y[:n], variance[:n], colour[:n]
		}
	} else if s.ColourTerm != 0 {
		for i := range y {
			y[i] -= s.ColourTerm * colour[i]
		}
	}
	if len(y) < max(1, s.MinStars) {
		r.Refusal = fmt.Sprintf("%d stars with a flux and a magnitude, want %d", len(y), s.MinStars)
		if noColour > 0 && !fit {
			r.Refusal += fmt.Sprintf("; %d have no colour", noColour)
		}
		return r
	}
	terms := 1
	if fit {
		terms = 2
	}
	design := make([]float64, 0, terms*len(y))
	for i := range y {
		design = append(design, 1)
		if fit {
			design = append(design, colour[i])
		}
	}
	f, err := solve(design, terms, y, variance)
	if err != nil {
		r.Refusal = "the fit of magnitudes and fluxes has no solution"
		return r
	}
	r.Stars, r.Clipped, r.Scatter, r.ChiSquare = f.stars, len(y)-f.stars, f.scatter, f.chi2
	switch {
	case f.stars < s.MinStars || 2*f.stars < len(y):
		r.Refusal = fmt.Sprintf("only %d of %d stars agree on a zero point", f.stars, len(y))
		return r
	case f.scatter > s.MaxScatter:
		r.Refusal = fmt.Sprintf("the stars scatter by %.3f mag beyond their errors, at most %.3f is accepted", f.scatter, s.MaxScatter)
		return r
	}
	r.ZeroPoint, r.Err = f.coefficient[0], math.Sqrt(f.covariance[0])
	r.ColourTerm, r.ColourTermErr = s.ColourTerm, 0
	switch {
	case fit:
		r.FittedColour = true
		r.ColourTerm, r.ColourTermErr, r.Covariance = f.coefficient[1], math.Sqrt(f.covariance[2]), f.covariance[1]
	case s.FitColour:
		r.ColourTerm = 0
	}
	return r
}

type solution struct {
	coefficient [2]float64
	covariance  [3]float64 // of both, upper triangle: 00, 01, 11
	scatter     float64
	chi2        float64
	stars       int
}

// solve fits with an unknown common scatter and clips.
func solve(design []float64, terms int, y, variance []float64) (solution, error) {
	n := len(y)
	var out solution
	out.scatter = leastScatter
	weight := make([]float64, n)
	residual := make([]float64, n)
	reweigh := func() {
		for i := range weight {
			weight[i] = 1 / (variance[i] + out.scatter*out.scatter)
		}
	}
	residuals := func() {
		for i := range residual {
			residual[i] = y[i]
			for k := range terms {
				residual[i] -= out.coefficient[k] * design[i*terms+k]
			}
		}
	}
	// A start that outliers do not move: the scatter follows from the median of
	// the residuals.
	scratch := make([]float64, n)
	for range 6 {
		reweigh()
		f, err := robust.LinearFit(design, terms, y, weight, 4.685, 50)
		if err != nil {
			return out, err
		}
		copy(out.coefficient[:], f.Coefficients)
		residuals()
		out.scatter = scatterWith(func(s2 float64) float64 {
			for i, v := range residual {
				scratch[i] = math.Abs(v) / math.Sqrt(variance[i]+s2)
			}
			m := robust.GaussianMAD * robust.Median(scratch)
			return m * m * float64(n) / float64(max(1, n-terms))
		})
	}
	// Then weighted least squares of what remains, with the scatter from chi-square.
	keep := make([]bool, n)
	limit := clipAt * (1 + clipFew/float64(max(1, n-terms)))
	for range 20 {
		changed := false
		out.stars = 0
		for i, v := range residual {
			k := v*v < limit*limit*(variance[i]+out.scatter*out.scatter)
			changed = changed || k != keep[i]
			keep[i] = k
			if k {
				out.stars++
			}
		}
		if out.stars <= terms {
			return out, errors.New("photometry: all stars were clipped")
		}
		before := out.scatter
		for range 30 {
			reweigh()
			if !out.leastSquares(design, terms, y, weight, keep) {
				return out, robust.ErrSingular
			}
			residuals()
			last := out.scatter
			out.scatter = scatterWith(func(s2 float64) float64 {
				sum := 0.0
				for i, v := range residual {
					if keep[i] {
						sum += v * v / (variance[i] + s2)
					}
				}
				return sum / float64(out.stars-terms)
			})
			if math.Abs(out.scatter-last) < 1e-9 {
				break
			}
		}
		if !changed && math.Abs(out.scatter-before) < 1e-7 {
			break
		}
	}
	reweigh()
	if !out.leastSquares(design, terms, y, weight, keep) {
		return out, robust.ErrSingular
	}
	residuals()
	for i, v := range residual {
		if keep[i] {
			out.chi2 += v * v * weight[i]
		}
	}
	return out, nil
}

// scatterWith finds the scatter at which reduced(scatter²), which falls, is one; it
// is not below leastScatter.
func scatterWith(reduced func(float64) float64) float64 {
	low, high := leastScatter, leastScatter
	if !(reduced(low*low) > 1) {
		return low
	}
	for high < 100 && reduced(high*high) > 1 {
		low, high = high, 2*high
	}
	for range 60 {
		s := 0.5 * (low + high)
		if reduced(s*s) > 1 {
			low = s
		} else {
			high = s
		}
	}
	return 0.5 * (low + high)
}

// leastSquares solves for one or two terms in closed form, with the covariance
// that the weights, inverse variances, imply.
func (s *solution) leastSquares(design []float64, terms int, y, weight []float64, keep []bool) bool {
	if terms == 1 {
		var sw, sy float64
		for i, w := range weight {
			if keep[i] {
				sw += w * design[i] * design[i]
				sy += w * design[i] * y[i]
			}
		}
		s.coefficient[0], s.covariance[0] = sy/sw, 1/sw
		return sw > 0
	}
	// About the weighted means, so that nothing cancels.
	var sw, mx, my float64
	for i, w := range weight {
		if keep[i] {
			sw += w
			mx += w * design[2*i+1]
			my += w * y[i]
		}
	}
	mx, my = mx/sw, my/sw
	var sxx, sxy float64
	for i, w := range weight {
		if keep[i] {
			d := design[2*i+1] - mx
			sxx += w * d * d
			sxy += w * d * (y[i] - my)
		}
	}
	if !(sw > 0 && sxx > 0) {
		return false
	}
	slope := sxy / sxx
	s.coefficient = [2]float64{my - slope*mx, slope}
	s.covariance = [3]float64{1/sw + mx*mx/sxx, -mx / sxx, 1 / sxx}
	return true
}
