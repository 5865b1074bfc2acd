package detect

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"nightsift/internal/outside"
)

// The spline must give the closed form of a pixel-integrated Gaussian and its
// derivatives anywhere between the samples.
func TestLocalPSFAgainstClosedForm(t *testing.T) {
	for _, fwhm := range []float64{1.8, 2.5, 3.5, 5, 8, 10} {
		sigma := fwhm / 2.3548
		g := gaussian{sigma, 1.2 * sigma}
		p := newLocalPSF(g, 100, 100, psfScale(g, 1, 1), stampRadius(fwhm))
		top := erfBin(0, g.sx) * erfBin(0, g.sy)
		rng := rand.New(rand.NewPCG(1, uint64(100*fwhm)))
		var q, lo, hi patch
		var worst, worstD, worstDD float64
		for range 20 {
			x, y := 30+rng.Float64(), 40+rng.Float64()
			p.draw(&q, x, y, 20, 30, 21, 19, true)
			const h = 1e-3
			p.draw(&lo, x-h, y, 20, 30, 21, 19, true)
			p.draw(&hi, x+h, y, 20, 30, 21, 19, true)
			for k := range q.p {
				px, py := float64(21+k%21)-x, float64(31+k/21)-y
				want := erfBin(px, g.sx) * erfBin(py, g.sy)
				worst = math.Max(worst, math.Abs(q.p[k]-want)/top)
				exact := func(d float64) float64 { return erfBin(px-d, g.sx) * erfBin(py, g.sy) }
				worstD = math.Max(worstD, math.Abs(q.px[k]-(exact(h)-exact(-h))/(2*h))*sigma/top)
				if d := math.Abs(q.p[k] - p.at(px, py)); d > 1e-12 {
					t.Fatalf("FWHM %g: draw and at differ by %g", fwhm, d)
				}
				for _, e := range [...]float64{q.px[k] - (hi.p[k]-lo.p[k])/(2*h), q.pxx[k] - (hi.px[k]-lo.px[k])/(2*h), q.pxy[k] - (hi.py[k]-lo.py[k])/(2*h)} {
					worstDD = math.Max(worstDD, math.Abs(e)/top)
				}
			}
		}
		t.Logf("FWHM %4.1f px: value within %.1e of the peak, slope within %.1e, own derivatives consistent to %.1e", fwhm, worst, worstD, worstDD)
		if worst > 3e-4 || worstD > 2e-3 || worstDD > 2e-3 {
			t.Errorf("FWHM %g: errors %g, %g, %g", fwhm, worst, worstD, worstDD)
		}
		if math.Abs(p.fwhm/(2.3548*math.Sqrt(g.sx*g.sy+1.0/12))-1) > 0.02 {
			t.Errorf("FWHM %g: measured width %g", fwhm, p.fwhm)
		}
	}
}

type stats struct{ n, sum, sum2 float64 }

func (s *stats) add(v float64) { s.n++; s.sum += v; s.sum2 += v * v }
func (s *stats) mean() float64 { return s.sum / s.n }
func (s *stats) rms() float64  { return math.Sqrt(s.sum2 / s.n) }
func (s *stats) std() float64  { return math.Sqrt(math.Max(0, s.sum2/s.n-s.mean()*s.mean())) }

// Fluxes without bias, errors that are the scatter, positions at the
// Cramér–Rao bound, for sources that fall anywhere on the pixel grid.
func TestPullsAndBias(t *testing.T) {
	cases := []struct {
		name string
		psf  renderer
		sn   float64
		gain float64
	}{
		{"sharp", gaussian{0.78, 0.78}, 20, 0},
		{"round", gaussian{1.3, 1.3}, 20, 0},
		{"round bright", gaussian{1.3, 1.3}, 100, 0},
		{"elongated photons", gaussian{1.2, 1.7}, 60, 1.5},
		{"wings", moffat{3, 2.8}, 40, 0},
		{"broad", gaussian{4, 4}, 25, 2},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			var bias, fp, xp, yp, bound stats
			for seed := range uint64(3) {
				s := newScene(420, 420, c.psf, 10, 10+seed)
				if c.gain > 0 {
					s.gain, s.photons = c.gain, true
				}
				flux := c.sn * s.unit()
				type spot struct{ x, y float64 }
				var spots []spot
				for y := 40.0; y < 400; y += 28 {
					for x := 40.0; x < 400; x += 28 {
						p := spot{x + s.rng.Float64(), y + s.rng.Float64()}
						spots = append(spots, p)
						s.add(p.x, p.y, flux)
					}
				}
				guess := psfScale(c.psf, 1, 1)
				psf := newLocalPSF(c.psf, 1, 1, guess, stampRadius(guess))
				ft := fitter{image: s.image, variance: s.variance, flags: s.flags, gain: s.gain}
				for _, p := range spots {
					// Start off the truth, as a noisy peak does.
					src := []source{{x0: p.x + 0.4*(s.rng.Float64()-0.5), y0: p.y + 0.4*(s.rng.Float64()-0.5)}}
					ft.open(src, math.Max(3, 1.5*psf.fwhm))
					out := ft.fit(psf, src, 1.5*psf.fwhm)
					if out.stop != "converged" {
						t.Fatalf("fit stopped by %q", out.stop)
					}
					src[0].unbias()
					bias.add(src[0].flux/flux - 1)
					fp.add((src[0].flux - flux) / src[0].fluxErr())
					xp.add((src[0].x - p.x) / src[0].xErr())
					yp.add((src[0].y - p.y) / src[0].yErr())
					// Cramér–Rao with the true variance of every pixel.
					const size = 61
					a, b := make([]float32, size*size), make([]float32, size*size)
					mid := make([]float32, size*size)
					c.psf.Render(mid, size, 1, 1, 0, 0)
					c.psf.Render(a, size, 1, 1, 0.01, 0)
					c.psf.Render(b, size, 1, 1, -0.01, 0)
					var info float64
					for k := range a {
						v := s.sky
						if s.photons {
							v += flux * float64(mid[k]) / s.gain
						}
						g := flux * float64(a[k]-b[k]) / 0.02
						info += g * g / v
					}
					bound.add((src[0].x - p.x) * math.Sqrt(info))
				}
			}
			t.Logf("%3.0f fits: bias %+.3f ± %.3f %%, pulls flux %.3f, x %.3f, y %.3f; x scatter / Cramér–Rao %.3f",
				bias.n, 100*bias.mean(), 100*bias.std()/math.Sqrt(bias.n), fp.std(), xp.rms(), yp.rms(), bound.rms())
			margin := 3.5 / math.Sqrt(2*fp.n) // of a spread
			for _, p := range []float64{fp.std(), xp.rms(), yp.rms()} {
				if math.Abs(p-1) > 0.05+margin {
					t.Errorf("pull %.3f", p)
				}
			}
			if math.Abs(bias.mean()) > 0.003+3*bias.std()/math.Sqrt(bias.n) {
				t.Errorf("bias %.3f %%", 100*bias.mean())
			}
			if bound.rms() > 1.1*(1+margin) {
				t.Errorf("position scatter is %.3f of the bound", bound.rms())
			}
		})
	}
}

// Against scipy.optimize.least_squares on the same pixels: flux, place and
// their covariance, for a lone source and for a close pair.
func TestFitAgainstScipy(t *testing.T) {
	type job struct {
		Sx, Sy float64
		X0, Y0 []float64 // starts
		Px, Py []float64 // pixels
		D, V   []float64
	}
	type answer struct {
		P   []float64 // f, x, y for each source
		Cov [][]float64
	}
	g := gaussian{1.35, 1.6}
	guess := psfScale(g, 1, 1)
	psf := newLocalPSF(g, 1, 1, guess, stampRadius(guess))
	var jobs []job
	var mine [][]source
	for k := range 12 {
		s := newScene(60, 60, g, 7, uint64(500+k))
		src := []source{{x0: 30, y0: 29}}
		s.add(30.3, 28.8, (10+20*float64(k))*s.unit())
		if k%2 == 1 {
			src = append(src, source{x0: 34, y0: 31})
			s.add(34.2, 31.4, 30*s.unit())
		}
		ft := fitter{image: s.image, variance: s.variance, flags: s.flags, gain: math.NaN()}
		w := ft.open(src, 1.5*psf.fwhm)
		j := job{Sx: g.sx, Sy: g.sy}
		for i, use := range w.use {
			if use {
				j.Px = append(j.Px, float64(w.i0+i%w.w+1))
				j.Py = append(j.Py, float64(w.j0+i/w.w+1))
				j.D = append(j.D, w.data[i])
				j.V = append(j.V, w.base[i])
			}
		}
		for _, q := range src {
			j.X0, j.Y0 = append(j.X0, q.x0), append(j.Y0, q.y0)
		}
		if out := ft.fit(psf, src, 1e6); out.stop != "converged" { // a bound so wide that it does not act
			t.Fatalf("fit %d: %s", k, out.stop)
		}
		jobs, mine = append(jobs, j), append(mine, src)
	}
	data, err := json.Marshal(jobs)
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "jobs.json")
	if err := os.WriteFile(path, data, 0o644); err != nil {
		t.Fatal(err)
	}
	text := outside.Python(t, `
import json, sys
import numpy as np
from scipy.optimize import least_squares
from scipy.special import erf
out = []
for j in json.load(open(sys.argv[1])):
    px, py, d, v = (np.array(j[k]) for k in ("Px", "Py", "D", "V"))
    def bins(u, s):
        return (erf((u + .5) / (s * 2**.5)) - erf((u - .5) / (s * 2**.5))) / 2
    def model(p):
        m = np.zeros(len(d))
        for f, x, y in p.reshape(-1, 3):
            m += f * bins(px - x, j["Sx"]) * bins(py - y, j["Sy"])
        return m
    start = []
    for x, y in zip(j["X0"], j["Y0"]):
        start += [max(d) * 10, x, y]
    r = least_squares(lambda p: (d - model(p)) / np.sqrt(v), start, x_scale="jac", xtol=1e-14, ftol=1e-14, gtol=1e-14)
    out.append({"P": r.x.tolist(), "Cov": np.linalg.inv(r.jac.T @ r.jac).tolist()})
json.dump(out, sys.stdout)
`, path)
	var want []answer
	if err := json.NewDecoder(bytes.NewReader(text)).Decode(&want); err != nil {
		t.Fatal(err)
	}
	if len(want) != len(mine) {
		t.Fatalf("%d answers for %d jobs", len(want), len(mine))
	}
	for k, src := range mine {
		for i, s := range src {
			c := func(a, b int) float64 { return want[k].Cov[3*i+a][3*i+b] }
			sigma := []float64{math.Sqrt(c(0, 0)), math.Sqrt(c(1, 1)), math.Sqrt(c(2, 2))}
			for a, v := range []float64{s.flux, s.x, s.y} {
				if d := (v - want[k].P[3*i+a]) / sigma[a]; math.Abs(d) > 0.03 {
					t.Errorf("job %d source %d parameter %d: %g, scipy %g: %.3f sigma apart", k, i, a, v, want[k].P[3*i+a], d)
				}
			}
			for a, v := range [][3]float64{{s.cov[0], c(0, 0), 0}, {s.cov[3], c(1, 1), 0}, {s.cov[5], c(2, 2), 0}, {s.cov[4], c(1, 2), math.Sqrt(c(1, 1) * c(2, 2))}, {s.cov[1], c(0, 1), math.Sqrt(c(0, 0) * c(1, 1))}} {
				if scale := math.Max(math.Abs(v[1]), v[2]); math.Abs(v[0]-v[1]) > 0.01*scale {
					t.Errorf("job %d source %d covariance element %d: %g, scipy %g", k, i, a, v[0], v[1])
				}
			}
		}
	}
}

func TestCholeskyRefusesSingular(t *testing.T) {
	for _, a := range [][]float64{{1, 1, 1, 1}, {0, 0, 0, 1}, {math.NaN(), 0, 0, 1}, {1, 2, 2, 1}} {
		b := []float64{1, 2}
		if choleskySolve(append([]float64(nil), a...), b, 2) {
			t.Errorf("%v solved", a)
		}
		if invert(append([]float64(nil), a...), 2) {
			t.Errorf("%v inverted", a)
		}
	}
	a := []float64{4, 1, 1, 3}
	if !invert(a, 2) || math.Abs(a[0]-3.0/11) > 1e-12 || math.Abs(a[1]+1.0/11) > 1e-12 {
		t.Errorf("inverse %v", a)
	}
}

func BenchmarkFit(b *testing.B) {
	for _, fwhm := range []float64{3, 6} {
		b.Run(fmt.Sprintf("fwhm%g", fwhm), func(b *testing.B) {
			g := gaussian{fwhm / 2.3548, fwhm / 2.3548}
			s := newScene(80, 80, g, 10, 1)
			s.add(40.3, 39.8, 30*s.unit())
			psf := newLocalPSF(g, 1, 1, psfScale(g, 1, 1), stampRadius(fwhm))
			ft := fitter{image: s.image, variance: s.variance, flags: s.flags, gain: math.NaN()}
			for b.Loop() {
				src := []source{{x0: 40, y0: 40}}
				ft.open(src, 1.5*fwhm)
				ft.fit(psf, src, 1.5*fwhm)
				ft.inspect(psf, src, 0, 2.2*fwhm, 0.02, nil, -1, false)
			}
		})
	}
}
