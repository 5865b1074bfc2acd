package simulate

import "math"

// transfer tabulates the Fourier transform of a PSF's profile against
// κ = √(kᵀCk), k in cycles per px.
type transfer struct {
	step float64
	val  []float64
}

func newTransfer(beta float64) *transfer {
	mix := mixture(beta)
	t := &transfer{step: 1.0 / 512}
	for i := 0; ; i++ {
		k := float64(i) * t.step
		v := 0.0
		for _, c := range mix {
			v += c.w * math.Exp(-2*math.Pi*math.Pi*c.v*k*k)
		}
		t.val = append(t.val, v)
		if v < 1e-10 {
			return t
		}
	}
}

func (t *transfer) at(kappa float64) float64 {
	f := kappa / t.step
	i := int(f)
	if i >= len(t.val)-1 {
		return 0
	}
	f -= float64(i)
	return t.val[i] + f*(t.val[i+1]-t.val[i])
}

// Side is what the optimal signal-to-noise ratio needs to know of one frame.
type side struct {
	psf      shape // in that frame's pixels
	transfer *transfer
	variance float64       // count² per px of that frame
	jacobian [2][2]float64 // d(this frame's px)/d(new frame's px)
	scale    float64       // new-frame counts per count of this frame
}

func (s *side) power(kx, ky float64) (invNoise float64) {
	// Frequencies in this frame's pixels: k' = J⁻ᵀ k.
	i := inverse(s.jacobian)
	qx := i[0][0]*kx + i[1][0]*ky
	qy := i[0][1]*kx + i[1][1]*ky
	kappa := math.Sqrt(math.Max(0, s.psf.cxx*qx*qx+2*s.psf.cxy*qx*qy+s.psf.cyy*qy*qy))
	p := s.transfer.at(kappa) * sinc(qx) * sinc(qy)
	area := math.Abs(s.jacobian[0][0]*s.jacobian[1][1] - s.jacobian[0][1]*s.jacobian[1][0])
	return s.variance * s.scale * s.scale * area / (p * p)
}

// unitSN returns the signal-to-noise ratio of a source of one (new-frame) count
// in the best possible difference of two frames with white noise,
//
//	(S/N)² = ∫ |P_N|²|P_R|² / (V_N|P_R|² + V_R|P_N|²) dk
//
// (Zackay, Ofek & Gal-Yam 2016, ApJ 830, 27), P_R and V_R carried onto the new
// frame's grid and counts. A source trailed by (tx,ty) px is found with its own
// trailed profile. The integral runs over all frequencies, which is the mean
// over sub-pixel positions; it differs from one position's value only for
// undersampled profiles. reference may be nil: then it is the new frame alone.
func unitSN(newSide, reference *side, tx, ty float64) float64 {
	width := newSide.psf.fwhm
	kmax := math.Min(1, 2/width)
	const n = 64
	h := 2 * kmax / n
	sum := 0.0
	for b := range n / 2 {
		ky := (float64(b) + 0.5) * h
		for a := range n {
			kx := -kmax + (float64(a)+0.5)*h
			d := newSide.power(kx, ky)
			if reference != nil {
				d += reference.power(kx, ky)
			}
			t := sinc(kx*tx + ky*ty)
			if d > 0 && !math.IsInf(d, 0) {
				sum += t * t / d
			}
		}
	}
	return math.Sqrt(2 * sum * h * h)
}

func sinc(x float64) float64 {
	x *= math.Pi
	if math.Abs(x) < 1e-6 {
		return 1
	}
	return math.Sin(x) / x
}
