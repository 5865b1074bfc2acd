package reference

import (
	"context"
	"math"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/robust"
)

func build(t testing.TB, paths []string, change func(*Config)) *Product {
	t.Helper()
	cfg := DefaultConfig()
	cfg.Scratch = t.TempDir()
	if change != nil {
		change(&cfg)
	}
	p, err := Build(context.Background(), paths, cfg)
	if err != nil {
		t.Fatal(err)
	}
	return p
}

// emptyNoise is the scatter of fluxes fitted with a point-spread function at
// places where the sky holds no star: the depth, measured without any of the
// program's own noise estimates.
func emptyNoise(p *Product, img *frame.Image, sky []skyStar, s shot, render func(dst []float32, x, y float64), size int) float64 {
	h := size / 2
	stamp := make([]float32, size*size)
	var list []float64
	for y := h + 40; y < img.Height-h-40; y += 6 {
		for x := h + 40; x < img.Width-h-40; x += 6 {
			clear := true
			for _, star := range sky {
				u, v := s.at(star.x, star.y)
				if math.Hypot(u-float64(x+1), v-float64(y+1)) < float64(h)+s.fwhm*math.Min(6, 1.5+math.Log10(1+star.flux/100)) {
					clear = false
					break
				}
			}
			if !clear {
				continue
			}
			render(stamp, float64(x+1), float64(y+1))
			var top, bottom float64
			for j := -h; j <= h; j++ {
				for i := -h; i <= h; i++ {
					q := float64(stamp[(j+h)*size+i+h])
					top += q * float64(img.Row(y + j)[x+i])
					bottom += q * q
				}
			}
			list = append(list, top/bottom)
		}
	}
	_, sigma := robust.MedianMAD(list)
	return sigma
}

func TestEqualFrames(t *testing.T) {
	sky := drawSky(150, 560, 2e6, 1)
	paths := shots(t, sky, 10, jitter)
	p := build(t, paths, nil)
	var anchor shot
	for k, in := range p.Inputs {
		if in.Anchor {
			anchor = defaultShot(k)
			jitter(k, &anchor)
		}
		t.Logf("%s used %v w %.4f scale %.4f±%.4f fwhm %.3f noise %.3f rms %.3f rejected %.5f %s", in.Name, in.Used, in.Weight, in.Scale, in.ScaleErr, in.GridFWHM, in.GridNoise, in.RMS, in.Rejected, in.Detail)
	}
	t.Logf("%s (%s): FWHM %.3f limit %.2f predicted %.2f mean %.2f proper %.2f best %.2f ratio/sqrt(N) %.4f", p.Method, p.MethodReason, p.FWHM, p.Limit, p.Predicted, p.MeanLimit, p.ProperLimit, p.BestFrame, p.BestFrame/p.Limit/math.Sqrt(10))
	t.Logf("noise %.3f pixel %.3f corr %.3f meta %+v", p.Noise, p.PixelNoise, p.Correlation, p.Frame.Meta)
	v := math.Sqrt(robust.MedianOf(p.Frame.Variance.Pix, nil))
	e := emptyNoise(p, p.Frame.Image, sky, anchor, func(dst []float32, x, y float64) { p.PSF.Render(dst, 25, x, y, 0, 0) }, 25)
	t.Logf("sqrt V %.3f; 5 sigma from empty sky %.2f", v, 5*e)
}
