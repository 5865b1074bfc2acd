package lightcurve

import (
	"errors"
	"math"

	"nightsift/internal/frame"
	"nightsift/subtract"
)

// Status says what became of one frame at the place.
type Status string

// The states. Their spelling is part of the tables.
const (
	Measured Status = "measured"
	Outside  Status = "outside" // the place is not on the frame
	Masked   Status = "masked"  // too much of the footprint is on pixels without a valid value
	Missing  Status = "missing" // there is no difference file, or it cannot be used: Reason says why
)

// Point is the brightness at the place on one frame. Unknown numbers are NaN.
type Point struct {
	Night, Frame, Filter string
	Reference            string // name of the reference that was taken away
	MidMJD               float64
	Status               Status
	Reason               string  // why there is no flux, as a sentence
	X, Y                 float64 // FITS pixels of the place

	Counts, CountsErr    float64 // count of the frame, signed; 1 sigma
	ZeroPoint, ZeroError float64 // mag of one count; its error, NaN if unknown
	Lost                 float64 // share of the squared PSF on pixels that could not be used
	Flags                frame.Flag
	Chi2                 float64 // of the pixels within the footprint, per degree of freedom

	// Flux is on the scale on which magnitude 25 is a flux of 1 (that is mag =
	// 25 − 2.5 log10 Flux), after the baseline was taken off.
	Flux, FluxErr         float64
	Baseline, BaselineErr float64 // what was taken off, on the same scale; 0 without
	Mag, MagErr           float64 // where Flux exceeds DetectionSigma errors
	MagLimit              float64 // elsewhere: no source was brighter, at LimitSigma
}

// FluxZeroPoint is the magnitude of a Flux of 1.
const FluxZeroPoint = 25

func unmeasured(status Status, reason string) Point {
	n := math.NaN()
	return Point{
		MidMJD: n, X: n, Y: n, Counts: n, CountsErr: n, ZeroPoint: n, ZeroError: n, Lost: n, Chi2: n,
		Flux: n, FluxErr: n, Mag: n, MagErr: n, MagLimit: n, Status: status, Reason: reason,
	}
}

// NoFile returns the point of a frame whose difference was not kept.
func NoFile(midMJD float64, filter string) Point {
	p := unmeasured(Missing, "no difference file was kept; set keep = \"difference\" under [search] and run the night again")
	p.MidMJD, p.Filter = midMJD, filter
	return p
}

// excluded is the set of flags whose pixels do not count, as in the search.
const excluded = frame.Unusable | frame.Edge

// around is the half width [px] of the square in which the file's significance
// is compared with the bare matched filter.
const around = 2

// Measure gives the brightness at a place (ra, dec [deg], ICRS) on a difference
// file. The frame's own faults are in Status and Reason.
//
// With P the local point-spread function, D the difference and V its variance,
// the flux is the best linear one, F = Σ P·D/V / Σ P²/V over the usable pixels
// (Horne 1986, PASP 98, 609, for a fixed place). Weights do not depend on the
// source's own light, so that F is unbiased; its photon noise, V + F·P/gain,
// goes into the error only. Near static light the error also holds what the
// search knows of it: the factor by which SIGNIFICANCE in the file is below the
// bare matched filter there.
func Measure(path string, ra, dec, maxLost float64) Point {
	s, err := subtract.ReadSection(path, ra, dec, around)
	var problem *frame.Problem
	switch {
	case errors.Is(err, subtract.ErrOutside):
		return unmeasured(Outside, "the place is not on the frame")
	case errors.As(err, &problem):
		return unmeasured(Missing, problem.Detail)
	case err != nil:
		return unmeasured(Missing, err.Error())
	}
	return measure(s, maxLost)
}

func measure(s *subtract.Section, maxLost float64) Point {
	p := unmeasured(Measured, "")
	p.Frame, p.Filter, p.Reference, p.MidMJD = s.Name, s.Meta.Filter, s.Info.ReferenceName, s.Meta.MidMJD
	p.X, p.Y, p.ZeroPoint, p.ZeroError = s.X, s.Y, s.Info.ZeroPoint, s.Info.ZeroPointErr
	size := s.PSF.Size
	stamp := make([]float32, size*size)
	ci, cj := int(math.Round(s.X))-1, int(math.Round(s.Y))-1
	s.PSF.Render(stamp, size, s.X, s.Y, s.X-float64(ci+1), s.Y-float64(cj+1))
	f := newFilter(s, stamp, size, ci, cj)
	p.Lost, p.Flags = 1-f.used/f.all, f.flags
	switch {
	case !(p.Lost <= maxLost):
		p.Status, p.Reason = Masked, lostReason(p.Lost, f.flags)
		return p
	case !(f.norm > 0):
		p.Status, p.Reason = Masked, "no pixel has a positive variance"
		return p
	}
	p.Counts = f.sum / f.norm
	factor := staticFactor(s)
	variance := factor / f.norm
	if g := s.Meta.Gain; g > 0 && p.Counts > 0 {
		variance += f.own * p.Counts / g / (f.norm * f.norm)
	}
	p.CountsErr = math.Sqrt(variance)
	p.Chi2 = f.chi2(p.Counts, s.Meta.Gain)
	return p
}

// filter is the matched filter at one place: sums over the usable pixels.
type filter struct {
	s         *subtract.Section
	stamp     []float32
	size      int
	i0, j0    int     // array indices of the stamp's first pixel within the section
	sum, norm float64 // Σ P·D/V, Σ P²/V
	own       float64 // Σ P³/V²: variance of sum for a source of one electron a count
	used, all float64 // Σ P² of usable pixels and of all
	flags     frame.Flag
}

// newFilter applies a stamp whose middle is pixel (ci,cj), array indices of the
// whole frame.
func newFilter(s *subtract.Section, stamp []float32, size, ci, cj int) *filter {
	f := &filter{s: s, stamp: stamp, size: size, i0: ci - size/2 - s.I0, j0: cj - size/2 - s.J0}
	for _, v := range stamp {
		f.all += float64(v) * float64(v)
	}
	f.each(func(at int, psf float64) {
		v := float64(s.Variance.Pix[at])
		f.used += psf * psf
		f.sum += psf * float64(s.Image.Pix[at]) / v
		f.norm += psf * psf / v
		f.own += psf * psf * psf / (v * v)
	})
	// Flags that carry weight: on pixels of at least a tenth of the peak.
	peak := float32(0)
	for _, v := range stamp {
		peak = max(peak, v)
	}
	for b := range size {
		for a := range size {
			i, j := f.i0+a, f.j0+b
			if i >= 0 && j >= 0 && i < s.Flags.Width && j < s.Flags.Height && stamp[b*size+a] > peak/10 {
				f.flags |= s.Flags.Bits[j*s.Flags.Width+i]
			}
		}
	}
	return f
}

// each calls visit for the usable pixels of the footprint.
func (f *filter) each(visit func(at int, psf float64)) {
	s := f.s
	for b := range f.size {
		j := f.j0 + b
		if j < 0 || j >= s.Image.Height {
			continue
		}
		for a := range f.size {
			i := f.i0 + a
			if i < 0 || i >= s.Image.Width {
				continue
			}
			at := j*s.Image.Width + i
			v, d := s.Variance.Pix[at], s.Image.Pix[at]
			if s.Flags.Bits[at]&excluded != 0 || !(v > 0) || v-v != 0 || d-d != 0 {
				continue
			}
			visit(at, float64(f.stamp[b*f.size+a]))
		}
	}
}

// chi2 is that of the pixels where the point-spread function is above a
// hundredth of its peak.
func (f *filter) chi2(flux, gain float64) float64 {
	peak := 0.0
	for _, v := range f.stamp {
		peak = math.Max(peak, float64(v))
	}
	sum, n := 0.0, 0
	f.each(func(at int, psf float64) {
		if psf < peak/100 {
			return
		}
		v := float64(f.s.Variance.Pix[at])
		if gain > 0 && flux > 0 {
			v += flux * psf / gain
		}
		r := float64(f.s.Image.Pix[at]) - flux*psf
		sum += r * r / v
		n++
	})
	if n < 2 {
		return math.NaN()
	}
	return sum / float64(n-1)
}

// staticFactor is the factor by which the variance of the matched filter exceeds
// that of the pixels alone: SIGNIFICANCE in the file knows the noise's remaining
// correlation and the errors that static light brings. It is found from the
// pixels around the place, with weights that fall off over about a pixel.
func staticFactor(s *subtract.Section) float64 {
	size := s.PSF.Size
	stamp := make([]float32, size*size)
	s.PSF.Render(stamp, size, s.X, s.Y, 0, 0)
	ci, cj := int(math.Round(s.X))-1, int(math.Round(s.Y))-1
	var bare, known float64
	for j := cj - around; j <= cj+around; j++ {
		for i := ci - around; i <= ci+around; i++ {
			a, b := i-s.I0, j-s.J0
			if a < 0 || b < 0 || a >= s.Significance.Width || b >= s.Significance.Height {
				continue
			}
			at := b*s.Significance.Width + a
			sig := float64(s.Significance.Pix[at])
			if s.Flags.Bits[at]&excluded != 0 || sig == 0 || sig-sig != 0 {
				continue
			}
			f := newFilter(s, stamp, size, i, j)
			if !(f.norm > 0) {
				continue
			}
			dx, dy := float64(i+1)-s.X, float64(j+1)-s.Y
			w := math.Exp(-(dx*dx + dy*dy) / 2)
			bare += w * f.sum * f.sum / f.norm
			known += w * sig * sig
		}
	}
	if !(known > 0) || !(bare > 0) {
		return 1
	}
	return bare / known
}
