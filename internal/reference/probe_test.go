package reference

import (
	"math"
	"testing"
)

// fluxOf fits the flux of a star at a known place with the product's PSF.
func fluxOf(p *Product, x, y float64, size int) float64 {
	h := size / 2
	i, j := int(math.Round(x))-1, int(math.Round(y))-1
	stamp := make([]float32, size*size)
	p.PSF.Render(stamp, size, x, y, x-float64(i+1), y-float64(j+1))
	var top, bottom float64
	for b := -h; b <= h; b++ {
		for a := -h; a <= h; a++ {
			q := float64(stamp[(b+h)*size+a+h])
			top += q * float64(p.Frame.Image.Row(j + b)[i+a])
			bottom += q * q
		}
	}
	return top / bottom
}

func anchorOf(p *Product, change func(int, *shot)) shot {
	for k, in := range p.Inputs {
		if in.Anchor {
			s := defaultShot(k)
			change(k, &s)
			return s
		}
	}
	panic("no anchor")
}

func logProduct(t *testing.T, p *Product) {
	for _, in := range p.Inputs {
		t.Logf("%s used %v w %.4f scale %.4f±%.4f fwhm %.3f noise %.3f rms %.3f rejected %.5f %s", in.Name, in.Used, in.Weight, in.Scale, in.ScaleErr, in.GridFWHM, in.GridNoise, in.RMS, in.Rejected, in.Detail)
	}
	t.Logf("%s (%s): FWHM %.3f limit %.2f predicted %.2f mean %.2f proper %.2f best %.2f", p.Method, p.MethodReason, p.FWHM, p.Limit, p.Predicted, p.MeanLimit, p.ProperLimit, p.BestFrame)
}

func TestProbeSeeings(t *testing.T) {
	sky := drawSky(150, 560, 2e6, 1)
	vary := func(k int, s *shot) {
		jitter(k, s)
		s.fwhm = 3 + 0.35*float64(k)
		s.throughput = 1 - 0.04*float64(k%4)
		s.sky = 300 + 50*float64(k%3)
	}
	sn := skyStar{x: 60.3, y: -80.2, flux: 40000}
	faint := skyStar{x: -120.3, y: 90.2, flux: 3000}
	paths := shots(t, sky, 10, func(k int, s *shot) {
		vary(k, s)
		if k == 4 {
			s.extra = []skyStar{sn, faint}
		}
	})
	clean := shots(t, sky, 10, vary)
	for _, method := range []string{MethodMean, MethodProper} {
		p := build(t, paths, func(c *Config) { c.Method = method })
		q := build(t, clean, func(c *Config) { c.Method = method })
		logProduct(t, p)
		a := anchorOf(p, vary)
		for _, s := range []skyStar{sn, faint} {
			x, y := a.at(s.x, s.y)
			d := fluxOf(p, x, y, 31) - fluxOf(q, x, y, 31)
			t.Logf("%s: event of %.0f left with %.2f = %.4f of it (outliers %v)", method, s.flux, d, d/s.flux, p.Outliers.Row(int(y) - 1)[int(x)-1])
		}
		off := build(t, clean, func(c *Config) { c.Method = method; c.Clip = 1e6 })
		for _, s := range sky {
			x, y := a.at(s.x, s.y)
			if s.flux < 30000 || x < 60 || y < 60 || x > 450 || y > 450 {
				continue
			}
			i, j := int(math.Round(x))-1, int(math.Round(y))-1
			f, g := fluxOf(q, x, y, 31), fluxOf(off, x, y, 31)
			t.Logf("%s star %.0f: flux %.5f of truth, clipped over unclipped %.5f, peak %.5f (rejected %v)", method, s.flux, f/s.flux/a.throughput, f/g,
				q.Frame.Image.Row(j)[i]/off.Frame.Image.Row(j)[i], q.Outliers.Row(j)[i])
		}
	}
}
