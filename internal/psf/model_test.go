package psf

import (
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"nightsift/internal/outside"
)

// madeModel is a model with given parameters, with or without a residual grid.
func madeModel(beta, fwhm, e1, e2 float64, grid bool) *Model {
	m := &Model{Width: 1000, Height: 1000, GridOrder: -1, radius: 20}
	m.prof.build(beta, [radialTerms]float64{})
	a2 := math.Pow(fwhm/2/m.prof.qh, 2)
	m.minEigen = 0.1 * a2
	m.shape = [3][]float64{{a2 * (1 + e1)}, {a2 * (1 - e1)}, {a2 * e2}}
	m.spacing = fwhm / 5
	if grid {
		rng := rand.New(rand.NewPCG(4, 4))
		m.GridOrder = 1
		m.center = []float64{0, 0.1, -0.2}
		for range 3 {
			plane := make([]float64, nodesAll)
			var net float64
			for k := range plane {
				u, v := float64(k%nodesSide-nodesHalf), float64(k/nodesSide-nodesHalf)
				plane[k] = 0.005 * rng.NormFloat64() * math.Exp(-(u*u+v*v)/40) / (fwhm * fwhm)
				net += plane[k] * m.spacing * m.spacing
			}
			m.nodes = append(m.nodes, plane)
			m.net = append(m.net, net)
		}
	}
	return m
}

// Pixel integration against brute force: 10×10 and 20×20 midpoints of Moffat's
// formula, extrapolated to infinitely many (Richardson).
func TestPixelIntegration(t *testing.T) {
	rng := rand.New(rand.NewPCG(8, 1))
	const size = 15
	dst := make([]float32, size*size)
	for _, beta := range []float64{2, 3.5, 25} {
		for _, fwhm := range []float64{1.5, 2, 3, 5, 10} {
			for _, e := range [][2]float64{{0, 0}, {0.2, -0.15}} {
				m := madeModel(beta, fwhm, e[0], e[1], false)
				sxx, syy, sxy := m.shape[0][0], m.shape[1][0], m.shape[2][0]
				det := sxx*syy - sxy*sxy
				dx, dy := rng.Float64()-0.5, rng.Float64()-0.5
				m.Render(dst, 500, 500, dx, dy)
				var worst, peak float64
				for j := range size {
					for i := range size {
						p := func(u, v, _, _ float64) float64 {
							q2 := (syy*u*u - 2*sxy*u*v + sxx*v*v) / det
							return (beta - 1) / math.Pi / math.Sqrt(det) * math.Pow(1+q2, -beta)
						}
						u, v := float64(i)-size/2-dx, float64(j)-size/2-dy
						truth := (4*integrate(p, u, v, 0, 0, 20) - integrate(p, u, v, 0, 0, 10)) / 3
						worst = math.Max(worst, math.Abs(float64(dst[j*size+i])-truth))
						peak = math.Max(peak, truth)
					}
				}
				if worst > 1e-4*peak {
					t.Errorf("beta %g, fwhm %g, elongation %v: error %.2g of the peak", beta, fwhm, e, worst/peak)
				}
			}
		}
	}
}

// The plane's sum is 1: a large stamp and, beyond it, Moffat's closed form for
// the light outside radius r, (1+r²/α²)^(1-β).
func TestUnitSum(t *testing.T) {
	for _, beta := range []float64{2.5, 3, 4.5, 15} {
		for _, grid := range []bool{false, true} {
			const fwhm, size = 3.0, 241
			m := madeModel(beta, fwhm, 0, 0, grid)
			dst := make([]float32, size*size)
			for _, d := range []float64{0, 0.21, 0.5} {
				m.Render(dst, 200, 700, d, -d)
				var sum float64
				for j := range size {
					for i := range size {
						u, v := float64(i)-size/2-d, float64(j)-size/2+d
						if u*u+v*v < 110*110 {
							sum += float64(dst[j*size+i])
						}
					}
				}
				alpha := fwhm / 2 / math.Sqrt(math.Pow(2, 1/beta)-1)
				want := 1 - math.Pow(1+110*110/(alpha*alpha), 1-beta)
				// The wing is divided by 1+net when there is a grid.
				if math.Abs(sum-want) > 5e-5 {
					t.Errorf("beta %g grid %v shift %g: sum %.6f, want %.6f", beta, grid, d, sum, want)
				}
			}
		}
	}
	// With a radial spline and a changed tail: the profile's own integral, by
	// an independent sum in ln q.
	var p profile
	p.build(3, [radialTerms]float64{0.1, -0.2, 0.1, 0.05, 0.2, -0.1, 0.3, 0.4, 0.3})
	var sum float64
	const n = 200000
	for k := range n {
		z := -12 + 52*(float64(k)+0.5)/n
		q := math.Exp(z)
		sum += 2 * math.Pi * q * q * p.value(q*q) * 52 / n
	}
	if math.Abs(sum-1) > 2e-5 {
		t.Errorf("integral of the profile is %.7f", sum)
	}
}

// Derivatives against finite differences: of the stamp by shift, of a pixel by
// the shape matrix, of the profile by q².
func TestDerivatives(t *testing.T) {
	const size = 25
	p, gx, gy := make([]float32, size*size), make([]float32, size*size), make([]float32, size*size)
	a, b := make([]float32, size*size), make([]float32, size*size)
	compared := 0
	for _, fwhm := range []float64{1.8, 3, 7} {
		m := madeModel(3, fwhm, 0.1, 0.05, true)
		m.RenderGradient(p, gx, gy, 300, 400, 0.13, -0.27)
		m.Render(a, 300, 400, 0.13, -0.27)
		for k := range p {
			if math.Abs(float64(p[k]-a[k])) > 1e-6*float64(p[size*size/2]) {
				t.Fatalf("RenderGradient and Render differ at %d: %g %g", k, p[k], a[k])
			}
		}
		for axis := range 2 {
			const e = 0.02
			if axis == 0 {
				m.Render(a, 300, 400, 0.13+e, -0.27)
				m.Render(b, 300, 400, 0.13-e, -0.27)
			} else {
				m.Render(a, 300, 400, 0.13, -0.27+e)
				m.Render(b, 300, 400, 0.13, -0.27-e)
			}
			var top, worst float64
			for k := range a {
				d := float64(a[k]-b[k]) / (2 * e)
				g := gx[k]
				if axis == 1 {
					g = gy[k]
				}
				top = math.Max(top, math.Abs(d))
				worst = math.Max(worst, math.Abs(d-float64(g)))
				compared++
			}
			if worst > 3e-3*top {
				t.Errorf("fwhm %g axis %d: gradient off by %.2g of its largest", fwhm, axis, worst/top)
			}
		}
		var l, h local
		m.at(&l, 300, 400)
		l.grid = false
		l.amp /= l.scale
		h.prof = l.prof
		s := [3]float64{m.shape[0][0], m.shape[1][0], m.shape[2][0]}
		for _, at := range [][2]float64{{0.2, 0.1}, {1.3, -0.7}, {-2.2, 3.1}, {6, 5}} {
			g := l.pixelGradient(at[0], at[1])
			for k, have := range [3]float64{g.sxx, g.syy, g.sxy} {
				e := 0.01 * s[0]
				q := s
				q[k] += e
				h.setShape(q[0], q[1], q[2])
				up := h.pixel(at[0], at[1])
				q[k] -= 2 * e
				h.setShape(q[0], q[1], q[2])
				down := h.pixel(at[0], at[1])
				want := (up - down) / (2 * e)
				if math.Abs(want-have) > 5e-3*l.pixel(0, 0)/s[0] {
					t.Errorf("fwhm %g at %v: derivative %d by shape %g, finite difference %g", fwhm, at, k, have, want)
				}
				compared++
			}
		}
	}
	var pr profile
	pr.build(3.3, [radialTerms]float64{0.1, -0.2, 0.1, 0.05, 0.2, -0.1, 0.3, 0.4, 0.3})
	for _, q2 := range []float64{0.1, 0.5, 1, 4, 20, 60, 200} {
		e := 0.01 * q2
		f, d := pr.at(q2)
		up, down := pr.value(q2+e), pr.value(q2-e)
		if want := (up - down) / (2 * e); math.Abs(want-d) > 5e-3*math.Abs(d)+1e-5*f {
			t.Errorf("q² %g: slope %g, finite difference %g", q2, d, want)
		}
		compared++
	}
	if compared < 1000 {
		t.Errorf("only %d derivatives compared", compared)
	}
}

func TestModelNumbers(t *testing.T) {
	// A Moffat of large β is a Gaussian: its moments, FWHM and 1/ΣP² = 4πσ²
	// are known; the pixel adds 1/12 px² and little else.
	m := madeModel(25, 5, 0.2, 0.1, false)
	xx, yy, xy := m.Moments(100, 100)
	s2 := 25 / (8 * math.Ln2)
	for _, c := range [][2]float64{{xx, s2*1.2 + 1./12}, {yy, s2*0.8 + 1./12}} {
		if math.Abs(c[0]/c[1]-1) > 0.04 {
			t.Errorf("moment %g, want about %g", c[0], c[1])
		}
	}
	if math.Abs(xy-0.1*s2) > 0.03 {
		t.Errorf("mixed moment %g, want about %g", xy, 0.1*s2)
	}
	m = madeModel(25, 5, 0, 0, false)
	if f := m.FWHM(1, 1); math.Abs(f-5.046) > 0.01 { // 2.3548·√(σ²+1/12)
		t.Errorf("FWHM %g, want 5.046", f)
	}
	// 1/∫P² of a Moffat profile is πα²(2β-1)/(β-1)²; a pixel adds about π/3.
	alpha2 := m.shape[0][0]
	want := math.Pi*alpha2*(2*25-1)/(24*24) + math.Pi/3
	if a := m.EffectiveArea(500, 500); math.Abs(a/want-1) > 0.005 {
		t.Errorf("effective area %g, want %g", a, want)
	}
	dst := make([]float32, 31*31)
	m = madeModel(3, 3, 0.1, 0, true)
	if n := testing.AllocsPerRun(20, func() { m.Render(dst, 10, 20, 0.1, 0.2) }); n != 0 {
		t.Errorf("Render allocates %g times", n)
	}
	for _, n := range []int{0, 4, 8, 10} {
		func() {
			defer func() {
				if r := recover(); r == nil || !strings.HasPrefix(fmt.Sprint(r), "psf:") {
					t.Errorf("a stamp of %d values: %v", n, r)
				}
			}()
			m.Render(make([]float32, n), 1, 1, 0, 0)
		}()
	}
}

// One star, fitted by scipy.optimize.least_squares with its own pixel
// integration (7×7 Gauss-Legendre from numpy) of the same Moffat profile.
func TestFitStarAgainstScipy(t *testing.T) {
	const script = `
import sys, json, numpy as np
from scipy.optimize import least_squares
d = json.loads(sys.argv[1])
pix = np.array(d["pix"]); x0, y0 = d["x"], d["y"]
xs, ys = np.array(d["xs"]), np.array(d["ys"])
beta, sxx, syy, sxy = d["beta"], d["sxx"], d["syy"], d["sxy"]
det = sxx*syy - sxy*sxy
g, w = np.polynomial.legendre.leggauss(7)
g, w = g/2, w/2
def psf(x, y):
    p = np.zeros(len(xs))
    for a, wa in zip(g, w):
        for b, wb in zip(g, w):
            u, v = xs - x + a, ys - y + b
            q = (syy*u*u - 2*sxy*u*v + sxx*v*v)/det
            p += wa*wb*(beta-1)/np.pi/np.sqrt(det)*(1+q)**(-beta)
    return p
flux = d["flux"]
p = np.array([flux, x0, y0, 0.0])
for k in range(6):
    var = d["sky"] + np.maximum(p[0], 0)*psf(p[1], p[2])/d["gain"]
    r = least_squares(lambda p: (pix - p[0]*psf(p[1], p[2]) - p[3])/np.sqrt(var), p, x_scale=[flux, 1, 1, 1], xtol=1e-12, ftol=1e-12, gtol=1e-12)
    p = r.x
cov = np.linalg.inv(r.jac.T @ r.jac)
print(json.dumps({"p": list(p), "e": list(np.sqrt(np.diag(cov))), "chi2": 2*r.cost/(len(pix)-4), "cxy": cov[1,2]}))
`
	m := madeModel(3.1, 2.6, 0.12, -0.08, false)
	s := newScene(60, 60, nil, 50, 1.7, 77)
	stamp := make([]float32, 51*51)
	const flux = 20000.0
	m.Render(stamp, 30, 30, 0.23, -0.41)
	for j := range 51 {
		for i := range 51 {
			s.img.Pix[(j+4)*60+i+4] = flux * stamp[j*51+i]
		}
	}
	s.expose(0)
	fit, ok := m.FitStar(s.img, s.var_, s.flags, 30, 30, s.gain, StarOptions{Radius: 8, FreeSky: true})
	if !ok {
		t.Fatalf("no fit: %+v", fit)
	}
	var xs, ys, pix []float64
	for j := 1; j <= 60; j++ {
		for i := 1; i <= 60; i++ {
			if math.Hypot(float64(i)-30, float64(j)-30) <= 8 {
				xs, ys = append(xs, float64(i)), append(ys, float64(j))
				pix = append(pix, float64(s.img.Pix[(j-1)*60+i-1]))
			}
		}
	}
	arg, err := json.Marshal(map[string]any{"pix": pix, "xs": xs, "ys": ys, "x": 30, "y": 30, "flux": 18000, "sky": 50, "gain": 1.7,
		"beta": 3.1, "sxx": m.shape[0][0], "syy": m.shape[1][0], "sxy": m.shape[2][0]})
	if err != nil {
		t.Fatal(err)
	}
	var ref struct {
		P, E      []float64
		Chi2, Cxy float64
	}
	if err := json.Unmarshal(outside.Python(t, script, string(arg)), &ref); err != nil {
		t.Fatal(err)
	}
	have := []float64{fit.Flux, fit.X, fit.Y, fit.Sky}
	errs := []float64{fit.FluxErr, fit.XErr, fit.YErr, fit.SkyErr}
	for k := range have {
		if d := math.Abs(have[k]-ref.P[k]) / ref.E[k]; d > 0.02 {
			t.Errorf("parameter %d: %g, scipy %g: %.3f sigma apart", k, have[k], ref.P[k], d)
		}
		if math.Abs(errs[k]/ref.E[k]-1) > 0.01 {
			t.Errorf("error %d: %g, scipy %g", k, errs[k], ref.E[k])
		}
	}
	if math.Abs(fit.Chi2/ref.Chi2-1) > 0.01 {
		t.Errorf("chi2 %g, scipy %g", fit.Chi2, ref.Chi2)
	}
	if math.Abs(fit.CovXY-ref.Cxy) > 0.02*ref.E[1]*ref.E[2] {
		t.Errorf("covariance of x and y %g, scipy %g", fit.CovXY, ref.Cxy)
	}
	// Negative light fits as well as positive.
	for k := range s.img.Pix {
		s.img.Pix[k] = -s.img.Pix[k]
	}
	neg, ok := m.FitStar(s.img, s.var_, s.flags, 30, 30, s.gain, StarOptions{Radius: 8, FreeSky: true})
	if !ok || math.Abs(neg.Flux+fit.Flux) > 3*fit.FluxErr || math.Abs(neg.X-fit.X) > 3*fit.XErr {
		t.Errorf("mirrored star: %+v", neg)
	}
}

func BenchmarkRender(b *testing.B) {
	dst := make([]float32, 31*31)
	for _, grid := range []bool{false, true} {
		m := madeModel(3, 3.5, 0.1, 0, grid)
		b.Run(fmt.Sprintf("grid %v", grid), func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				m.Render(dst, 10, 20, 0.1, 0.2)
			}
		})
	}
}

func BenchmarkFit(b *testing.B) {
	s := newScene(4096, 4096, trueMoffat(3.2, varying(3.5)), 100, 2, 1)
	s.scatter(400, 4e3, 3e5, 40, 0.6, 20)
	s.expose(0.03)
	for b.Loop() {
		if _, err := Fit(s.img, s.var_, s.flags, s.list, s.gain, DefaultConfig()); err != nil {
			b.Fatal(err)
		}
	}
}
