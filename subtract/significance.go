package subtract

import (
	"context"
	"math"
	"sync"

	"nightsift/internal/fft"
	"nightsift/internal/frame"
)

// scoreInput is what the matched filter reads.
type scoreInput struct {
	difference *frame.Image // whitened; 0 where masked
	variance   *frame.Image
	static     *frame.Image // the matched reference [count]: light that was there before
	flags      *frame.Mask
	halo       int
	tiles      []tile
	workers    int

	// prepare returns a function that, for a tile, fills the spectrum of the
	// difference's PSF and returns the factor of whiteness.
	prepare func(plan *fft.Plan) func(psf []complex64, t tile) float64

	jitter     float64 // px
	scaleError float64 // relative, of all static light
	shapeError float64 // relative, of static light as sharp as a star
	fwhm       float64 // px
}

// leastFootprint is the part of the squared PSF that must lie on usable pixels
// for a score to be given.
const leastFootprint = 0.4

// score fills dst with the matched-filter significance
//
//	S = (P ⋆ D/V) / √(c · P² ⋆ 1/V)
//
// in which masked pixels have no weight and c is the factor by which
// correlation left in the noise changes the variance of the numerator. Near
// static light the variance gains terms of relative scale error ε, of shape
// error η and of astrometric jitter j (after Zackay, Ofek & Gal-Yam 2016, ApJ
// 830, 27, section 3.3):
//
//	S → S / √(1 + ε²T² + η²H² + j²|∇T|²)
//
// with T the significance with which the static light itself would be seen. H
// is T without what is smooth over two FWHM, scaled to equal T on a star: an
// error of the kernel's shape leaves much of a star behind and little of the
// broad light of a galaxy.
//
// Pixels without a sufficient footprint get S = 0 and the Edge flag.
func score(ctx context.Context, dst *frame.Image, in scoreInput) error {
	const skip = frame.Unusable | frame.Edge
	// Tiles read their neighbours' flags, so new ones are set at the end.
	var lock sync.Mutex
	var allThin []int
	defer func() {
		for _, at := range allThin {
			in.flags.Bits[at] |= frame.Edge
		}
	}()
	return forTiles(ctx, in.workers, in.tiles, func() func(tile) {
		plan := fft.NewPlan(tileSize, tileSize)
		prepare := in.prepare(plan)
		n := plan.SpectrumLen()
		psf := make([]complex64, n)
		psf2 := make([]complex64, n)
		spectrum := make([]complex64, n)
		a := make([]float32, tileSize*tileSize)
		inverse := make([]float32, tileSize*tileSize)
		norm := make([]float32, tileSize*tileSize)
		static := make([]float32, tileSize*tileSize)
		footprint := make([]float32, tileSize*tileSize)
		sharp := make([]float32, tileSize*tileSize)
		spectrum2 := make([]complex64, n)
		highPass := sharpTransfer(plan.SpectrumWidth(), in.fwhm)
		return func(t tile) {
			c := prepare(psf, t)
			var thin []int // pixels without a sufficient footprint
			defer func() {
				lock.Lock()
				allThin = append(allThin, thin...)
				lock.Unlock()
			}()
			// The squared PSF.
			copy(spectrum, psf)
			plan.Inverse(a, spectrum)
			full := 0.0
			for i, v := range a {
				a[i] = v * v
				full += float64(v * v)
			}
			plan.Forward(psf2, a)

			// m/V and mD/V.
			bright := false
			eps2, eta2, jit2 := float32(in.scaleError*in.scaleError), float32(in.shapeError*in.shapeError), float32(in.jitter*in.jitter)
			count, masked := 0, false
			for j := range tileSize {
				y := t.y0 - in.halo + j
				arow := a[j*tileSize : (j+1)*tileSize]
				irow := inverse[j*tileSize : (j+1)*tileSize]
				srow := static[j*tileSize : (j+1)*tileSize]
				frow := footprint[j*tileSize : (j+1)*tileSize]
				clear(arow)
				clear(irow)
				clear(srow)
				clear(frow)
				if y < 0 || y >= in.flags.Height || y >= t.y1+in.halo {
					continue
				}
				flags, difference, variance, before := in.flags.Row(y), in.difference.Row(y), in.variance.Row(y), in.static.Row(y)
				x0 := t.x0 - in.halo
				for i := max(0, -x0); i < min(tileSize, t.x1+in.halo-x0); i++ {
					x := x0 + i
					if x >= in.flags.Width {
						break
					}
					if flags[x]&skip != 0 {
						masked = true
						continue
					}
					w := 1 / variance[x]
					irow[i] = w
					frow[i] = 1
					arow[i] = difference[x] * w
					s := before[x] * w
					srow[i] = s
					// Static light counts once it could move S by a tenth of
					// its variance.
					if s*before[x]*(eps2+eta2+jit2) > 0.02 {
						bright = true
					}
					count++
				}
			}
			if count == 0 {
				for y := t.y0; y < t.y1; y++ {
					clear(dst.Row(y)[t.x0:t.x1])
				}
				return
			}
			plan.Forward(spectrum, a)
			fft.MultiplyConj(spectrum, spectrum, psf)
			plan.Inverse(a, spectrum)
			plan.Forward(spectrum, inverse)
			fft.MultiplyConj(spectrum, spectrum, psf2)
			plan.Inverse(norm, spectrum)
			if bright {
				plan.Forward(spectrum, static)
				fft.MultiplyConj(spectrum, spectrum, psf)
				copy(spectrum2, spectrum)
				plan.Inverse(static, spectrum)
				scaleReal(spectrum2, highPass)
				plan.Inverse(sharp, spectrum2)
			}
			if masked {
				plan.Forward(spectrum, footprint)
				fft.MultiplyConj(spectrum, spectrum, psf2)
				plan.Inverse(footprint, spectrum)
			}
			least := float32(leastFootprint * full)
			for y := t.y0; y < t.y1; y++ {
				j := y - t.y0 + in.halo
				out := dst.Row(y)
				flags := in.flags.Row(y)
				for x := t.x0; x < t.x1; x++ {
					if flags[x]&skip != 0 {
						out[x] = 0
						continue
					}
					at := j*tileSize + x - t.x0 + in.halo
					v := norm[at]
					if masked && footprint[at] < least {
						thin = append(thin, y*in.flags.Width+x)
						out[x] = 0
						continue
					}
					root := float32(math.Sqrt(float64(v) * c))
					s := a[at] / root
					if bright {
						// T and its gradient by central differences.
						tc := static[at] / root
						gx := (static[at+1] - static[at-1]) / (2 * root)
						gy := (static[at+tileSize] - static[at-tileSize]) / (2 * root)
						h := sharp[at] / root
						extra := eps2*tc*tc + eta2*h*h + jit2*(gx*gx+gy*gy)
						s /= float32(math.Sqrt(float64(1 + extra)))
					}
					out[x] = s
				}
			}
		}
	})
}

// sharpTransfer returns the transfer function of H: one minus a Gaussian of
// width σ = FWHM, over what that leaves of a star's matched-filter peak, which
// is a Gaussian of width √2·FWHM/2.355.
func sharpTransfer(half int, fwhm float64) []float32 {
	t := make([]float32, tileSize*half)
	g := blur{xx: fwhm * fwhm, yy: fwhm * fwhm}
	peak := 2 * fwhm * fwhm / 5.545
	left := 1 - peak/(peak+fwhm*fwhm)
	for v := range tileSize {
		for u := range half {
			t[v*half+u] = float32((1 - g.transfer(float64(u)/tileSize, frequency(v))) / left)
		}
	}
	return t
}
