package subtract

import (
	"math"
	"sort"

	"nightsift/internal/frame"
)

// starProbe is what one bright star left in the difference: how many sigma the
// remains are as a source and as a shift, against how many sigma the star
// itself would be.
type starProbe struct {
	score, static        float64 // matched filter on the difference and on the matched reference
	shiftX, shiftY       float64 // the same with the PSF's gradients
	gradientX, gradientY float64
	aperture, light      float64 // sum within 1.5 FWHM over its noise, of the remains and of the star
	pixelChi2            float64
	x, y                 float64
}

// probeStar applies the PSF and its gradients at the pixel nearest to (x,y).
// psf, gx and gy are squares of side 2·half+1.
func probeStar(difference, variance, static *frame.Image, flags *frame.Mask, x, y float64, psf, gx, gy []float32, half int, fwhm float64) (starProbe, bool) {
	cx, cy := int(math.Round(x))-1, int(math.Round(y))-1
	if cx-half < 0 || cy-half < 0 || cx+half >= flags.Width || cy+half >= flags.Height {
		return starProbe{}, false
	}
	p := starProbe{x: x, y: y}
	var apertureNoise float64
	var pp, dd, ss, xx, yy, dx, dy, sx, sy float64
	side := 2*half + 1
	used := 0.0
	all := 0.0
	core := max(2, half/3)
	pixels := 0
	for j := range side {
		at := (cy-half+j)*flags.Width + cx - half
		for i := range side {
			k := j*side + i
			v := float64(psf[k])
			all += v * v
			if flags.Bits[at+i]&(frame.Unusable|frame.Edge) != 0 {
				continue
			}
			used += v * v
			w := 1 / float64(variance.Pix[at+i])
			d := float64(difference.Pix[at+i]) * w
			s := float64(static.Pix[at+i]) * w
			a, b := float64(gx[k]), float64(gy[k])
			pp += v * v * w
			dd += v * d
			ss += v * s
			xx += a * a * w
			yy += b * b * w
			dx += a * d
			dy += b * d
			sx += a * a * w
			sy += b * b * w
			if r2 := float64((i-half)*(i-half) + (j-half)*(j-half)); r2 <= 2.25*fwhm*fwhm {
				p.aperture += d / w
				p.light += s / w
				apertureNoise += 1 / w
			}
			if abs(i-half) <= core && abs(j-half) <= core {
				p.pixelChi2 += d * d / w
				pixels++
			}
		}
	}
	if used < 0.8*all || pp <= 0 || pixels == 0 {
		return starProbe{}, false
	}
	p.score = dd / math.Sqrt(pp)
	p.static = ss / math.Sqrt(pp)
	flux := ss / pp
	p.shiftX, p.gradientX = dx/math.Sqrt(xx), flux*math.Sqrt(xx)
	p.shiftY, p.gradientY = dy/math.Sqrt(yy), flux*math.Sqrt(yy)
	p.aperture /= math.Sqrt(apertureNoise)
	p.light /= math.Sqrt(apertureNoise)
	p.pixelChi2 /= float64(pixels)
	return p, true
}

// excess finds the ε for which residuals r, each of unit noise plus ε times
// its lever, have the median square of a normal variate, 0.4549. It is 0 when
// the residuals are no larger than noise. Stars that changed are dropped: those
// beyond 3.5 of the sigma so found, round by round.
func excess(residual, lever []float64) float64 {
	r, l := append([]float64(nil), residual...), append([]float64(nil), lever...)
	eps := 0.0
	for range 10 {
		eps = medianExcess(r, l)
		n := 0
		for i := range r {
			if r[i]*r[i] <= 12.25*(1+eps*eps*l[i]*l[i]) {
				r[n], l[n] = r[i], l[i]
				n++
			}
		}
		if n == len(r) {
			break
		}
		r, l = r[:n], l[:n]
	}
	return eps
}

func medianExcess(residual, lever []float64) float64 {
	if len(residual) == 0 {
		return 0
	}
	const medianSquare = 0.4549364 // of chi-square with one degree of freedom
	squares := make([]float64, len(residual))
	median := func(eps float64) float64 {
		for i, r := range residual {
			squares[i] = r * r / (1 + eps*eps*lever[i]*lever[i])
		}
		sort.Float64s(squares)
		return squares[len(squares)/2]
	}
	if median(0) <= medianSquare {
		return 0
	}
	low, high := 0.0, 1.0
	for median(high) > medianSquare && high < 1e3 {
		high *= 4
	}
	for range 60 {
		mid := 0.5 * (low + high)
		if median(mid) > medianSquare {
			low = mid
		} else {
			high = mid
		}
	}
	return high
}
