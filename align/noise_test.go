package align

import (
	"context"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/dsp/fourier"

	"nightsift/internal/frame"
)

// White noise, resampled, has the power spectrum that InterpolationPower says:
// rows of a resampled noise frame are transformed by gonum and averaged.
func TestInterpolationPowerOfResampledNoise(t *testing.T) {
	const size, n = 512, 256
	rng := rand.New(rand.NewPCG(5, 6))
	img := frame.NewImage(size, size)
	for i := range img.Pix {
		img.Pix[i] = float32(rng.NormFloat64())
	}
	variance := frame.NewImage(size, size)
	for i := range variance.Pix {
		variance.Pix[i] = 1
	}
	for _, c := range []struct{ phaseX, phaseY, scale float64 }{{0, 0, 1}, {0.5, 0.25, 1}, {0.3, 0.8, 1}, {0.4, 0.1, 1.6}} {
		s := newSource(img, variance, frame.NewMask(size, size))
		s.interpolate()
		tr := fromAffine(affine{x0: 100 + c.phaseX - c.scale, xx: c.scale, y0: 100 + c.phaseY - c.scale, yy: c.scale}, n, n)
		out, err := s.forScale(c.scale).resample(context.Background(), tr, n, n, 1)
		if err != nil {
			t.Fatal(err)
		}
		fft := fourier.NewFFT(n)
		p := &Pair{Scale: c.scale}
		// The mean over rows at one frequency along x is |L̂x(f)|² times the mean
		// of |L̂y|² over all frequencies.
		my := 0.0
		for k := range n {
			f := float64(k) / n
			if f > 0.5 {
				f -= 1
			}
			my += meanPower(p, c.phaseY, f, c.scale) / n
		}
		bad := 0
		for k := 2; k < n/2; k += 3 {
			power := 0.0
			rows := 0
			for j := 8; j < n-8; j++ {
				row := make([]float64, n)
				for i := range row {
					// A window against leakage from the steep parts.
					row[i] = float64(out.image.Pix[j*n+i]) * math.Sqrt2 * math.Sin(math.Pi*(float64(i)+0.5)/n)
				}
				a := cmplx.Abs(fft.Coefficients(nil, row)[k])
				power += a * a / n
				rows++
			}
			area := c.scale * c.scale // flux is kept: counts grow with the pixel's area
			got := power / float64(rows) / (area * area)
			want := meanPower(p, c.phaseX, float64(k)/n, c.scale) * my / area
			if c.scale == 1 && math.Abs(got-want) > 0.25*want+0.02 || c.scale != 1 && math.Abs(got-want) > 0.3*want+0.02 {
				bad++
				if bad < 4 {
					t.Errorf("phase %.2f %.2f scale %.1f f %.3f: power %.3f, want %.3f", c.phaseX, c.phaseY, c.scale, float64(k)/n, got, want)
				}
			}
		}
	}
}

// meanPower averages over the phases that a grid of another scale meets.
func meanPower(p *Pair, phase, f, scale float64) float64 {
	if scale == 1 {
		return p.InterpolationPower(phase, f)
	}
	sum := 0.0
	const n = 40
	for i := range n {
		sum += p.InterpolationPower((float64(i)+0.5)/n, f) / n
	}
	return sum
}
