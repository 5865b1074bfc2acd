package subtract_test

import (
	"context"
	"math"
	"testing"

	"nightsift/subtract"
)

// Light sent through a solution shows as the difference's own point-spread
// function, in image and score, and nothing else changes; that the light could have
// been there from the start is what the tests of package efficiency show.
func TestLightThroughASolution(t *testing.T) {
	pair := simulatedPair(t, "gaussian", 320)
	for _, method := range []string{subtract.MethodKernel, subtract.MethodProper} {
		cfg := subtract.DefaultConfig()
		cfg.Method = method
		d, solution, err := subtract.Solve(context.Background(), pair, cfg)
		if err != nil {
			t.Fatal(err)
		}
		const x, y = 161, 163
		radius := solution.PSF().Radius()
		light := subtract.Light{X: x, Y: y, Radius: radius, Counts: make([]float32, (2*radius+1)*(2*radius+1))}
		solution.PSF().Render(light.Counts, x, y, 0, 0)
		flux := float32(4 * d.Info.FluxLimit5)
		for i := range light.Counts {
			light.Counts[i] *= flux
		}
		with, err := solution.With(context.Background(), []subtract.Light{light})
		if err != nil {
			t.Fatal(err)
		}
		if !with.Injected || d.Injected {
			t.Errorf("%s: marks of injection: %v and %v", method, with.Injected, d.Injected)
		}
		if with.Write(t.TempDir()+"/difference.fits", nil) == nil {
			t.Errorf("%s: the difference with light in it was written", method)
		}
		size := 2*radius + 1
		want := make([]float32, size*size)
		d.PSF.Render(want, size, x, y, 0, 0)
		top := want[len(want)/2]
		for k := range d.Image.Pix {
			u, v := k%d.Image.Width+1-x, k/d.Image.Width+1-y
			change := with.Image.Pix[k] - d.Image.Pix[k]
			if u < -radius-16 || u > radius+16 || v < -radius-16 || v > radius+16 {
				if change != 0 {
					t.Fatalf("%s: the difference changed %d, %d px away", method, u, v)
				}
				continue
			}
			if u < -3 || u > 3 || v < -3 || v > 3 || !d.Searchable(float64(x+u), float64(y+v)) {
				continue
			}
			if e := want[(v+radius)*size+u+radius]; math.Abs(float64(change/flux-e)) > 0.02*float64(top) {
				t.Errorf("%s: at %d, %d the light shows as %.4f, the point-spread function is %.4f", method, u, v, change/flux, e)
			}
		}
		at := (y-1)*d.Image.Width + x - 1
		if gain := float64(with.Significance.Pix[at] - d.Significance.Pix[at]); d.Searchable(x, y) && (gain < 18 || gain > 21) {
			t.Errorf("%s: light of 20 sigma on empty sky raises the score by %.1f", method, gain)
		}
	}
}
