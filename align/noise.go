package align

import "math"

// InterpolationPower returns the power with which the reference's noise passes
// its resampling onto the new grid, along one axis: |L̂(f)|² for positions that
// lie a fraction phase beyond a reference pixel, at a frequency f [cycles per
// new pixel]. It is 1 at zero frequency.
//
// The resampling is a sum over pixels, L̂ = Σ w_k exp(-2πi f k). For the spline
// w follows from the B-spline β by the inverse of its samples, whose transform
// is (66 + 52 cos ω + 2 cos 2ω)/120 (Unser, Aldroubi & Eden 1993). Pixels
// longer than the reference's take every position between its pixels, and the
// power beyond their own highest frequency folds back.
func (p *Pair) InterpolationPower(phase, f float64) float64 {
	if p.Scale > widenFrom {
		return p.lanczosPower(phase, f) + p.lanczosPower(phase, f-1) + p.lanczosPower(phase, f+1)
	}
	f /= p.Scale // cycles per reference pixel
	w := 2 * math.Pi * f
	samples := (66 + 52*math.Cos(w) + 2*math.Cos(2*w)) / 120
	if math.Abs(f) > 0.5 {
		// Beyond the reference's own frequencies only what the spline does not
		// suppress is left.
		t := math.Sin(w/2) / (w / 2)
		h := math.Pow(t, 6) / samples
		return h * h
	}
	var re, im float64
	for k := -2.0; k <= 3; k++ {
		b := bspline5(k - phase)
		s, c := math.Sincos(w * k)
		re += b * c
		im += b * s
	}
	return (re*re + im*im) / (samples * samples)
}

// lanczosPower is |L̂|² of the widened Lanczos kernel.
func (p *Pair) lanczosPower(phase, f float64) float64 {
	if f /= p.Scale; math.Abs(f) > 0.5 {
		return 0 // the reference's pixels have no such frequency
	}
	k := math.Ceil(lobes * p.Scale)
	var re, im, sum float64
	for i := -k + 1; i <= k; i++ {
		w := lanczos((i - phase) / p.Scale)
		s, c := math.Sincos(2 * math.Pi * f * i)
		re += w * c
		im += w * s
		sum += w
	}
	return (re*re + im*im) / (sum * sum)
}
