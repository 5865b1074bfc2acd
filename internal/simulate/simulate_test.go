package simulate

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"nightsift/internal/fits"
	"nightsift/internal/outside"
)

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s: got %.8g, want %.8g ± %.2g", what, got, want, tolerance)
	}
}

func TestPoissonMoments(t *testing.T) {
	// Closed form: mean = variance = μ, third central moment = μ.
	for _, mu := range []float64{0.3, 4, 11.9, 12.1, 60, 900, 40000} {
		r := stream(7, uint64(mu*10))
		const n = 200000
		var s, s2, s3 float64
		for range n {
			d := poisson(r, mu) - mu
			s, s2, s3 = s+d, s2+d*d, s3+d*d*d
		}
		near(t, fmt.Sprintf("mean of μ=%g", mu), s/n, 0, 4*math.Sqrt(mu/n))
		near(t, fmt.Sprintf("variance of μ=%g", mu), s2/n/mu, 1, 4*math.Sqrt((2+1/mu)/n))
		near(t, fmt.Sprintf("third moment of μ=%g", mu), s3/n/math.Pow(mu, 1.5), 1/math.Sqrt(mu), 4*math.Sqrt(15.0/n)+4/mu/math.Sqrt(n)*8)
	}
	if poisson(stream(1), -3) != 0 || poisson(stream(1), math.NaN()) != 0 {
		t.Error("a mean that is not positive must give 0")
	}
}

func TestPowerTable(t *testing.T) {
	for _, beta := range []float64{2, 3.1, 6} {
		table := newPowerTable(beta)
		for y := 1.0; y < 1e7; y *= 1.0137 {
			near(t, "relative", table.at(y)/math.Pow(y, -beta), 1, 2e-6)
		}
	}
}

func testBrush(size int, psf PSF) *brush {
	c := &Conditions{Camera: Camera{Width: size, Height: size, Scale: 0.5, RA: 10, Dec: 20}, PSF: psf, Gain: 1, Transparency: 1, Sky: 1}
	b := newBrush(c)
	b.limit = 1e-9
	return b
}

func moments(b *brush) (sum, x, y, xx, yy, xy float64) {
	for k, v := range b.pix {
		px, py := float64(k%b.w+1), float64(k/b.w+1)
		sum += float64(v)
		x += float64(v) * px
		y += float64(v) * py
	}
	x, y = x/sum, y/sum
	for k, v := range b.pix {
		px, py := float64(k%b.w+1)-x, float64(k/b.w+1)-y
		xx += float64(v) * px * px
		yy += float64(v) * py * py
		xy += float64(v) * px * py
	}
	return sum, x, y, xx / sum, yy / sum, xy / sum
}

// Second moments of a Moffat profile are C/(2(β-2)), of a Gaussian C; the pixel
// adds 1/12 (variance of a uniform distribution).
func TestPointMoments(t *testing.T) {
	for _, c := range []struct {
		psf    PSF
		x, y   float64
		tolSum float64
	}{
		{PSF{Beta: 7, FWHM: 3, E1: 0.1, E2: -0.07}, 100.3, 99.6, 2e-6},
		{PSF{Beta: 6, FWHM: 1.8, E1: 0.05}, 100.5, 101, 2e-6},
		{PSF{FWHM: 1.8, E2: 0.15}, 100.21, 99.9, 2e-6},
		{PSF{FWHM: 4.4, E1: 0.15, E2: 0.1}, 100.0, 99.5, 2e-6},
	} {
		b := testBrush(200, c.psf)
		b.point(c.x, c.y, 1)
		s := c.psf.at(&b.c.Camera, c.x, c.y)
		k := 1.0
		if c.psf.Beta != 0 {
			k = 1 / (2 * (c.psf.Beta - 2))
		}
		sum, x, y, xx, yy, xy := moments(b)
		near(t, "sum", sum, 1, c.tolSum)
		near(t, "x", x, c.x, 1e-5)
		near(t, "y", y, c.y, 1e-5)
		near(t, "xx", xx, k*s.cxx+1.0/12, 2e-3*k*s.cxx)
		near(t, "yy", yy, k*s.cyy+1.0/12, 2e-3*k*s.cyy)
		near(t, "xy", xy, k*s.cxy, 2e-3*k*s.cxx)
	}
}

// The flux within R of a Moffat profile is 1-(1+R²/α²)^(1-β) (Moffat 1969).
func TestPointEnclosedFlux(t *testing.T) {
	p := PSF{Beta: 2.6, FWHM: 3.3}
	b := testBrush(300, p)
	b.point(150.37, 149.81, 1e5)
	alpha := p.FWHM / widthFactor(p.Beta)
	for _, radius := range []float64{12, 30, 100} {
		in := 0.0
		for k, v := range b.pix {
			// Share of the pixel inside the circle, by its own sub-sampling.
			n := 0
			for a := range 100 {
				dx := float64(k%b.w+1) + (float64(a%10)-4.5)/10 - 150.37
				dy := float64(k/b.w+1) + (float64(a/10)-4.5)/10 - 149.81
				if dx*dx+dy*dy < radius*radius {
					n++
				}
			}
			in += float64(v) * float64(n) / 100
		}
		want := 1e5 * (1 - math.Pow(1+radius*radius/(alpha*alpha), 1-p.Beta))
		near(t, fmt.Sprintf("flux within %g px", radius), in/want, 1, 2e-4)
	}
}

// The half maximum falls where FWHM says, along both axes.
func TestFullWidth(t *testing.T) {
	s := newShape(3, 4, 0.2, 0)
	major, minor, angle := s.majorMinor()
	near(t, "axis ratio", minor/major, (1-0.2)/(1+0.2), 1e-12)
	near(t, "mean width", math.Sqrt(major*minor), 4, 1e-12)
	near(t, "angle", angle, 0, 1e-9)
	ixx, _, _, _ := s.inv()
	near(t, "half maximum", math.Pow(1+ixx*major*major/4, -3), 0.5, 1e-12)
}

// The mixture of Gaussians is the Moffat profile itself.
func TestMixtureIsMoffat(t *testing.T) {
	for _, beta := range []float64{2.3, 3.1, 4.5} {
		worst := 0.0
		for r := 0.0; r < 30; r += 0.1 {
			sum := 0.0
			for _, c := range mixture(beta) {
				sum += c.w / (2 * math.Pi * c.v) * math.Exp(-r*r/(2*c.v))
			}
			want := (beta - 1) / math.Pi * math.Pow(1+r*r, -beta)
			worst = math.Max(worst, math.Abs(sum/want-1))
		}
		if worst > 1e-3 {
			t.Errorf("β = %g: mixture departs by %.2g", beta, worst)
		}
	}
}

// A galaxy far smaller than a pixel is a star: two independent renderings, by
// quadrature of the profile and by the mixture, agree.
func TestTinyGalaxyIsStar(t *testing.T) {
	for _, p := range []PSF{{Beta: 3.1, FWHM: 2.2, E1: 0.1, E2: 0.05}, {Beta: 2.5, FWHM: 5}, {FWHM: 3}} {
		a, b := testBrush(121, p), testBrush(121, p)
		a.point(60.3, 61.4, 1)
		g := &Galaxy{Sersic: 1, Radius: 0.001, Ratio: 0.8}
		b.addGalaxy(&b.c.Camera, p.at(&b.c.Camera, 60.3, 61.4), b.mix, g, 60.3, 61.4, 1, b.limit)
		peak, worst := 0.0, 0.0
		for k := range a.pix {
			peak = math.Max(peak, float64(a.pix[k]))
			worst = math.Max(worst, math.Abs(float64(a.pix[k]-b.pix[k])))
		}
		if worst > 4e-5*peak {
			t.Errorf("%+v: departs by %.2g of the peak", p, worst/peak)
		}
	}
}

// Half of a Sérsic profile's light lies within its half-light radius, by
// definition; its density follows the formula.
func TestSersic(t *testing.T) {
	for _, n := range []float64{1, 1.5, 2.5, 4} {
		mix := sersicMixture(n)
		half, sum := 0.0, 0.0
		for _, c := range mix {
			half += c.w * (1 - math.Exp(-1/(2*c.v)))
			sum += c.w
		}
		near(t, fmt.Sprintf("n=%g total", n), sum, 1, 1e-12)
		// The light beyond 12 half-light radii (3 % at n = 4) is left out.
		near(t, fmt.Sprintf("n=%g within the half-light radius", n), half, 0.5, 0.016)
		for _, r := range []float64{0.1, 0.3, 1, 2, 3} {
			d := 0.0
			for _, c := range mix {
				d += c.w / (2 * math.Pi * c.v) * math.Exp(-r*r/(2*c.v))
			}
			near(t, fmt.Sprintf("n=%g density at %g", n, r), d/sersicDensity(n, r), 1, 0.05)
		}
	}
	// b_n: 1.678347 for n = 1, 7.669249 for n = 4 (Graham & Driver 2005, PASA 22, 118).
	near(t, "b1", sersicB(1), 1.67834699, 1e-4)
	near(t, "b4", sersicB(4), 7.66924944, 1e-6)
	// Rendered: total, and second moments C of galaxy and PSF added.
	b := testBrush(400, PSF{FWHM: 3})
	g := &Galaxy{Sersic: 1, Radius: 3, Ratio: 0.5, Angle: 30}
	b.addGalaxy(&b.c.Camera, b.c.PSF.at(&b.c.Camera, 200, 200), b.mix, g, 200, 200, 1000, 1e-6)
	sum, _, _, xx, yy, xy := moments(b)
	near(t, "rendered total", sum, 1000, 0.5)
	var second float64
	for _, c := range sersicMixture(1) {
		second += c.w * c.v
	}
	a2, b2 := 36.0/0.5*second, 36*0.5*second // px² at 0.5 arcsec per px
	s2 := math.Pow(3/2.3548200450309493, 2) + 1.0/12
	// North is +y, east is -x; the major axis points 30° from north to east.
	s, c := math.Sincos(30 * deg)
	near(t, "yy", yy, a2*c*c+b2*s*s+s2, 0.01*yy)
	near(t, "xx", xx, a2*s*s+b2*c*c+s2, 0.01*yy)
	near(t, "xy", xy, -(a2-b2)*s*c, 0.01*yy)
}

func TestPointInsideFollowsLight(t *testing.T) {
	g := &Galaxy{Sersic: 2, Radius: 2, Ratio: 0.6, Angle: 40}
	r := stream(3)
	in := 0
	const n = 20000
	var ee, nn float64
	for range n {
		e, north := g.pointInside(r, 12)
		s, c := math.Sincos(g.Angle * deg)
		major, minor := e*s+north*c, -e*c+north*s
		q := math.Sqrt(g.Ratio)
		if math.Hypot(major*q, minor/q) < g.Radius {
			in++
		}
		ee, nn = ee+e*e, nn+north*north
	}
	near(t, "fraction within the half-light radius", float64(in)/n, 0.5, 0.02)
	if nn <= ee {
		t.Error("at a position angle of 40° the light extends farther north than east")
	}
}

func TestCameraRoundTrip(t *testing.T) {
	for _, mirrored := range []bool{false, true} {
		c := Camera{Width: 900, Height: 700, RA: 359.97, Dec: 71.3, Scale: 0.7, Rotation: 37, Mirrored: mirrored}
		c.Distortion = newDistortion(900, 700, 9)
		r := stream(5)
		for range 300 {
			x, y := uniform(r, -20, 920), uniform(r, -20, 720)
			ra, dec := c.PixelToSky(x, y)
			bx, by := c.SkyToPixel(ra, dec)
			near(t, "x", bx, x, 1e-7)
			near(t, "y", by, y, 1e-7)
			// The Jacobian: its determinant is one over the pixel's area on the sky.
			j := c.jacobian(x, y)
			det := math.Abs(j[0][0]*j[1][1] - j[0][1]*j[1][0])
			r0, d0 := c.PixelToSky(x-0.5, y)
			r1, d1 := c.PixelToSky(x+0.5, y)
			r2, d2 := c.PixelToSky(x, y-0.5)
			r3, d3 := c.PixelToSky(x, y+0.5)
			cos := math.Cos(dec * deg)
			turn := func(d float64) float64 { return math.Remainder(d, 360) * cos * 3600 }
			area := math.Abs(turn(r1-r0)*(d3-d2)*3600 - turn(r3-r2)*(d1-d0)*3600)
			near(t, "area of a pixel", det*area, 1, 1e-4)
		}
	}
}

// The header of a frame, read by astropy (wcslib), puts the sky where the
// camera did.
func TestHeaderAgainstAstropy(t *testing.T) {
	dir := t.TempDir()
	type check struct {
		File string
		X, Y []float64
	}
	var checks []check
	var want [][2][]float64
	for k, mirrored := range []bool{false, true} {
		c, _ := baseConditions(200, 4)
		c.Camera.Mirrored, c.Camera.Rotation = mirrored, 33-200*float64(k)
		c.Camera.Width = 260
		c.Camera.Distortion = newDistortion(260, 200, 5)
		c.HeaderDistortion, c.HeaderEast, c.HeaderNorth = true, 0, 0
		e := render(&c, &Scene{})
		path := filepath.Join(dir, fmt.Sprintf("f%d.fits", k))
		if err := e.Write(path); err != nil {
			t.Fatal(err)
		}
		q := check{File: path}
		var ra, dec []float64
		r := stream(9, uint64(k))
		for range 50 {
			x, y := uniform(r, 1, 260), uniform(r, 1, 200)
			a, d := c.Camera.PixelToSky(x, y)
			q.X, q.Y = append(q.X, x), append(q.Y, y)
			ra, dec = append(ra, a), append(dec, d)
		}
		checks = append(checks, q)
		want = append(want, [2][]float64{ra, dec})
	}
	in, _ := json.Marshal(checks)
	out := outside.Python(t, `
import json, sys, warnings
from astropy.io import fits
from astropy.wcs import WCS
warnings.simplefilter("ignore")
res = []
for c in json.loads(sys.argv[1]):
    with fits.open(c["File"], checksum=True) as f:
        w = WCS(f[0].header)
        ra, dec = w.all_pix2world(c["X"], c["Y"], 1)
        res.append([list(map(float, ra)), list(map(float, dec)), str(f[0].data.dtype), float(f[0].data.mean())])
json.dump(res, sys.stdout)
`, string(in))
	var got [][]any
	if err := json.Unmarshal(out, &got); err != nil {
		t.Fatalf("%v: %s", err, out)
	}
	compared := 0
	for k := range want {
		for axis := range 2 {
			for i, v := range got[k][axis].([]any) {
				near(t, "position from astropy", v.(float64), want[k][axis][i], 1e-9)
				compared++
			}
		}
		if got[k][2].(string) != "uint16" {
			t.Errorf("pixels are %v, want uint16", got[k][2])
		}
		near(t, "mean sky", got[k][3].(float64), 400, 1)
	}
	if compared != 200 {
		t.Errorf("compared %d numbers, want 200", compared)
	}
}

// Counts have the mean of the sky and the variance of photons and read noise:
// the line variance = mean/gain + (read noise/gain)², also for an average of N
// exposures read as one frame of the header's gain and read noise.
func TestMeanVarianceLine(t *testing.T) {
	for _, stack := range []int{1, 9} {
		for _, sky := range []float64{4, 40, 900, 20000} {
			c, _ := baseConditions(400, 2)
			c.Integers, c.Sky, c.Stack, c.Saturation = false, sky, stack, 0
			e := render(&c, &Scene{})
			gain, _ := e.Float("GAIN")
			read, _ := e.Float("RDNOISE")
			s, s2 := 0.0, 0.0
			for _, v := range e.Pix {
				d := float64(v) - sky
				s, s2 = s+d, s2+d*d
			}
			n := float64(len(e.Pix))
			want := sky/gain + read*read/(gain*gain)
			near(t, "mean", s/n, 0, 4*math.Sqrt(want/n))
			near(t, fmt.Sprintf("variance at sky %g, %d exposures", sky, stack), s2/n/want, 1, 4.5*math.Sqrt(2/n)*1.2)
			near(t, "stated noise", e.SkyNoise*e.SkyNoise/want, 1, 1e-9)
		}
	}
}

func TestStarSums(t *testing.T) {
	c, _ := baseConditions(300, 2)
	c.Saturation, c.Integers = 0, false
	c.Transparency = 0.7
	c.PSF.Beta = 4.5
	ra, dec := c.Camera.PixelToSky(140.2, 151.7)
	mag := 16.0
	e := render(&c, &Scene{Stars: []Star{{ra, dec, mag}}})
	sum := 0.0
	for _, v := range e.Pix {
		sum += float64(v) - c.Sky
	}
	want := 0.7 * math.Pow(10, 0.4*(c.ZeroPoint-mag))
	sigma := math.Sqrt(float64(len(e.Pix))*c.variance(c.Sky) + want/c.Gain)
	near(t, "flux of a star", sum, want, 3.5*sigma+1e-4*want)
	light := 0.0
	for _, v := range e.Light {
		light += float64(v)
	}
	near(t, "noiseless flux", light/want, 1, 6e-4)
}

// Against closed forms for Gaussians. One frame: (S/N)² = F²/(4πσ²V), σ² with the
// pixel's 1/12 up to higher order. Two frames with σ_R² = 2σ_N²:
// (S/N)² = F²/(4πσ_N²V_N)·2·(1 - ρ ln(1+1/ρ)) where ρ = V_R/V_N multiplies the
// broader one, by substituting w = exp(-4π²σ_N²k²).
func TestUnitSNClosedForm(t *testing.T) {
	one := [2][2]float64{{1, 0}, {0, 1}}
	tr := newTransfer(0)
	mk := func(sigma2, v float64) side {
		return side{psf: shape{fwhm: 2.3548 * math.Sqrt(sigma2), cxx: sigma2 - 1.0/12, cyy: sigma2 - 1.0/12}, transfer: tr, variance: v, jacobian: one, scale: 1}
	}
	n := mk(6, 9)
	near(t, "single", unitSN(&n, nil, 0, 0)*math.Sqrt(4*math.Pi*6*9), 1, 1e-3)
	r := mk(6, 4)
	near(t, "equal profiles", unitSN(&n, &r, 0, 0)*math.Sqrt(4*math.Pi*6*13), 1, 1e-3)
	for _, v := range []float64{0.5, 9, 40} {
		// ∫du/(V_N e^{au} + V_R e^{2au}) / 4π = (1 - ρ ln(1+1/ρ)) / (4π a V_N), a = σ_N².
		r = mk(12, v)
		rho := v / 9
		want := (1 - rho*math.Log(1+1/rho)) / (4 * math.Pi * 6 * 9)
		near(t, fmt.Sprintf("broader reference of variance %g", v), unitSN(&n, &r, 0, 0)/math.Sqrt(want), 1, 2e-3)
	}
	// A reference of half the scale (four pixels to one): the same sky noise per
	// area and the same profile on the sky give the same answer.
	r = mk(6, 4)
	want := unitSN(&n, &r, 0, 0)
	fine := side{psf: shape{fwhm: 2 * r.psf.fwhm, cxx: 4 * r.psf.cxx, cyy: 4 * r.psf.cyy}, transfer: tr, variance: 1,
		jacobian: [2][2]float64{{0, -2}, {2, 0}}, scale: 1}
	near(t, "finer reference", unitSN(&n, &fine, 0, 0)/want, 1, 4e-3)
	// A trail costs signal; a long one as the square root of its length.
	trailed := unitSN(&n, nil, 5, 0)
	if !(trailed < unitSN(&n, nil, 0, 0)) {
		t.Error("a trail must lower the signal-to-noise ratio")
	}
}

// The matched filter, applied to rendered noise and sources in the plain way,
// reaches the predicted signal-to-noise ratio.
func TestUnitSNIsReached(t *testing.T) {
	psf := PSF{Beta: 3, FWHM: 2.6, E1: 0.1}
	sum := 0.0
	const n = 25
	r := rand.New(rand.NewPCG(1, 2))
	for range n {
		b := testBrush(121, psf)
		b.point(61+r.Float64(), 61+r.Float64(), 1)
		for _, v := range b.pix {
			sum += float64(v) * float64(v)
		}
	}
	s := side{psf: newShape(3, 2.6, 0.1, 0), transfer: newTransfer(3), variance: 1, jacobian: [2][2]float64{{1, 0}, {0, 1}}, scale: 1}
	near(t, "√ΣP²", math.Sqrt(sum/n)/unitSN(&s, nil, 0, 0), 1, 2e-3)
}

// Facts of common practice about type Ia supernovae.
func TestLightCurveFacts(t *testing.T) {
	s := Supernova{PeakMJD: 61500, Stretch: 1, Z: 0.0001}
	near(t, "rise time", s.PeakMJD-s.Explosion(), 20, 0.1)
	near(t, "peak", s.PeakAbsolute(), -19.5, 1e-9)
	// Five billion suns of absolute magnitude 4.75 (bolometric 4.74, IAU 2015 resolution B2).
	near(t, "peak in suns", math.Pow(10, 0.4*(4.74-s.PeakAbsolute()))/5e9, 1, 0.15)
	if !math.IsInf(s.Mag(s.Explosion()-0.01), 1) || math.IsInf(s.Mag(s.Explosion()+0.01), 1) {
		t.Error("light must begin with the explosion")
	}
	near(t, "decline in 15 days", s.Mag(s.PeakMJD+15*(1+s.Z))-s.Mag(s.PeakMJD), 1.1, 0.01)
	// Early light grows as the square of time.
	near(t, "early index", math.Log(templateFlux(-18.9)/templateFlux(-19.0))/math.Log(1.1), 2, 0.1)
	// Continuous, brightest at maximum, monotone on both sides.
	last := 0.0
	for p := -20.0; p <= 0; p += 0.05 {
		f := templateFlux(p)
		if f < last {
			t.Fatalf("not rising at %g", p)
		}
		last = f
	}
	near(t, "maximum", last, 1, 1e-3)
	for p := 0.0; p < 120; p += 0.05 {
		f := templateFlux(p)
		if f > last+1e-3 || last-f > 0.01 {
			t.Fatalf("step or rise at %g", p)
		}
		last = f
	}
	slow, fast := Supernova{Stretch: 1.1}, Supernova{Stretch: 0.9}
	if slow.PeakAbsolute() >= fast.PeakAbsolute() {
		t.Error("the slower must be the brighter")
	}
	// cz/H₀ = 428.3 Mpc at z = 0.1; with q₀ = -0.5 the luminosity distance of flat
	// ΛCDM (Ωm = 0.3, H₀ = 70) is 460.3 Mpc: modulus 38.315 (astropy.cosmology).
	near(t, "distance modulus", DistanceModulus(0.1), 38.315, 0.02)
}

func TestISODate(t *testing.T) {
	// Epochs: MJD 0 is 1858-11-17; 51544.5 is J2000; 60310 is 2024-01-01.
	for mjd, want := range map[float64]string{
		0: "1858-11-17T00:00:00.000", 51544.5: "2000-01-01T12:00:00.000", 60310: "2024-01-01T00:00:00.000",
		60369.75: "2024-02-29T18:00:00.000", demoFirst: "2027-03-02T00:00:00.000",
		60309.9999999999: "2024-01-01T00:00:00.000",
	} {
		if got := isoDate(mjd); got != want {
			t.Errorf("%v: got %s, want %s", mjd, got, want)
		}
	}
}

func TestScenarios(t *testing.T) {
	for _, name := range Names() {
		t.Run(name, func(t *testing.T) {
			if About(name) == "" {
				t.Error("no description")
			}
			p, err := Scenario(name, 320, 11)
			if err != nil {
				t.Fatal(err)
			}
			e, tr := p.New[0], p.Truth.Frames[0]
			if len(p.Truth.Sources) < 3 {
				t.Errorf("%d events, want at least 3", len(p.Truth.Sources))
			}
			for i, s := range p.Truth.Sources {
				if !s.Covered {
					t.Errorf("%s is not covered", s.ID)
				}
				if s.Masked() && name != "dirty" {
					t.Errorf("%s stands on bad pixels %b", s.ID, s.Defects)
				}
				if !(s.LocalSN > 1 && s.LocalSN < 101 && s.SN >= s.LocalSN*0.999) {
					t.Errorf("%s: S/N %.1f, local %.1f", s.ID, s.SN, s.LocalSN)
				}
				for _, o := range p.Truth.Sources[:i] {
					if math.Hypot(o.X-s.X, o.Y-s.Y) < apart {
						t.Errorf("%s and %s are too near each other", s.ID, o.ID)
					}
				}
				// The affine map leads to where the reference's camera sees it.
				x, y := p.Reference.Conditions.Camera.SkyToPixel(s.RA, s.Dec)
				a := tr.Affine
				if d := math.Hypot(a[0]+a[1]*s.X+a[2]*s.Y-x, a[3]+a[4]*s.X+a[5]*s.Y-y); d > tr.Distortion*1.1+1e-6 {
					t.Errorf("%s: affine map off by %.3f px, truth says %.3f", s.ID, d, tr.Distortion)
				}
			}
			// Robust noise of the frame agrees with the truth where the sky is empty.
			empty := p.EmptySky(0, 1)
			n, sum, sum2 := 0, 0.0, 0.0
			for k, ok := range empty {
				if !ok || k%e.Width == 0 || !empty[k-1] {
					continue
				}
				d := float64(e.Pix[k] - e.Pix[k-1])
				n++
				sum, sum2 = sum+d, sum2+d*d
			}
			if n > 500 {
				got := math.Sqrt(sum2 / float64(n) / 2)
				near(t, "noise on empty sky", got/tr.Noise, 1, 0.08+3/math.Sqrt(float64(n)))
			}
		})
	}
	if _, err := Scenario("nothing", 300, 1); err == nil {
		t.Error("an unknown scenario must be an error")
	}
	if _, err := Scenario("plain", 3, 1); err == nil {
		t.Error("a size of 3 must be an error")
	}
}

// Photometry with the true profile on the finished pixels, constant light taken
// away, gives back each event's flux at its position with the stated error.
func TestEventsCarryTheirFlux(t *testing.T) {
	p, err := Scenario("gradient", 600, 21)
	if err != nil {
		t.Fatal(err)
	}
	e := p.New[0]
	c := &e.Conditions
	b := newBrush(c)
	b.static(p.Scene)
	var n, sum, sum2, shift float64
	for _, s := range p.Truth.Sources {
		if s.Kind == KindFaded {
			continue
		}
		prof := newPlane(b.w, b.h)
		prof.addPoint(c.PSF.at(&c.Camera, s.X, s.Y), b.table, s.X, s.Y, 1, 1e-7)
		var pd, pp, vv, px, xx float64
		for j := int(s.Y) - 15; j < int(s.Y)+15; j++ {
			for i := int(s.X) - 15; i < int(s.X)+15; i++ {
				k := j*b.w + i
				sky := c.localSky(float64(i+1), float64(j+1))
				d := float64(e.Pix[k]-b.pix[k]) - sky
				q := float64(prof.pix[k])
				slope := float64(prof.pix[k-1]-prof.pix[k+1]) / 2 // -dP/dx
				pd, pp = pd+q*d, pp+q*q
				vv += q * q * c.variance(sky+float64(e.Light[k]))
				px, xx = px+slope*d, xx+slope*slope
			}
		}
		pull := (pd/pp - s.Flux) / (math.Sqrt(vv) / pp)
		n, sum, sum2 = n+1, sum+pull, sum2+pull*pull
		shift += px / xx / s.Flux * s.LocalSN * s.LocalSN
	}
	if n < 20 {
		t.Fatalf("only %g events", n)
	}
	near(t, "mean pull", sum/n, 0, 3.5/math.Sqrt(n))
	near(t, "pull variance", sum2/n, 1, 3.5*math.Sqrt(2/n))
	var w float64
	for _, s := range p.Truth.Sources {
		if s.Kind != KindFaded {
			w += s.LocalSN * s.LocalSN
		}
	}
	near(t, "mean shift in x [px]", shift/w, 0, 4*1.6/math.Sqrt(w))
}

func TestDirtyDefects(t *testing.T) {
	p, err := Scenario("dirty", 700, 3)
	if err != nil {
		t.Fatal(err)
	}
	var count [16]int
	e := p.New[0]
	for k, d := range e.Defects {
		for b := range count {
			if d>>b&1 == 1 {
				count[b]++
			}
		}
		if d&DefectSaturated != 0 && d&DefectColumn == 0 && float64(e.Pix[k]) < e.Conditions.Saturation {
			t.Fatalf("saturated pixel %d holds %g counts", k, e.Pix[k])
		}
	}
	for b, name := range []string{"saturated", "bleed", "column", "cosmic ray", "streak", "hot"} {
		if count[b] == 0 {
			t.Errorf("no pixel with %s", name)
		}
	}
	// Charge is conserved by bleeding.
	pix := []float32{1, 2, 900, 4, 5, 6, 300, 8}
	d := make([]uint16, len(pix))
	bleed(1, len(pix), pix, 200, d)
	sum := float32(0)
	for _, v := range pix {
		sum += v
		if v > 200 {
			t.Errorf("a pixel holds %g, more than the full well", v)
		}
	}
	if sum != 1226 {
		t.Errorf("charge went from 1226 to %g", sum)
	}
}

func TestSameSeedSamePixels(t *testing.T) {
	a, _ := Scenario("dirty", 256, 5)
	b, _ := Scenario("dirty", 256, 5)
	c, _ := Scenario("dirty", 256, 6)
	same := 0
	for k := range a.New[0].Pix {
		if a.New[0].Pix[k] != b.New[0].Pix[k] || a.Reference.Pix[k] != b.Reference.Pix[k] {
			t.Fatal("the same seed gave other pixels")
		}
		if a.New[0].Pix[k] == c.New[0].Pix[k] {
			same++
		}
	}
	if same > len(a.New[0].Pix)/10 {
		t.Error("another seed gave the same pixels")
	}
	for k := range a.Truth.Sources {
		if a.Truth.Sources[k].X != b.Truth.Sources[k].X || a.Truth.Sources[k].Flux != b.Truth.Sources[k].Flux {
			t.Fatal("the same seed gave another truth")
		}
	}
}

func TestWriteAndReadTruth(t *testing.T) {
	p, err := Scenario("gradient", 256, 5)
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	if err := p.Write(dir); err != nil {
		t.Fatal(err)
	}
	got, err := ReadTruth(filepath.Join(dir, "truth.fits"))
	if err != nil {
		t.Fatal(err)
	}
	if len(got.Sources) != len(p.Truth.Sources) || len(got.Frames) != 1 {
		t.Fatalf("%d sources and %d frames, want %d and 1", len(got.Sources), len(got.Frames), len(p.Truth.Sources))
	}
	for k, w := range p.Truth.Sources {
		g := got.Sources[k]
		if math.IsNaN(w.HostMag) != math.IsNaN(g.HostMag) {
			t.Errorf("host magnitude %v, want %v", g.HostMag, w.HostMag)
		}
		g.HostMag, w.HostMag = 0, 0
		if g != w {
			t.Errorf("read %+v, want %+v", g, w)
		}
	}
	if got.Frames[0] != p.Truth.Frames[0] {
		t.Errorf("read %+v, want %+v", got.Frames[0], p.Truth.Frames[0])
	}
	f, err := fits.Open(filepath.Join(dir, "new-1.fits"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	img, err := f.Image(0)
	if err != nil {
		t.Fatal(err)
	}
	for k, v := range img.Pix {
		w := p.New[0].Pix[k]
		if v != w && !(math.IsNaN(float64(v)) && math.IsNaN(float64(w))) {
			t.Fatalf("pixel %d: read %g, want %g", k, v, w)
		}
	}
	outside.Command(t, "fitsverify", "-q", filepath.Join(dir, "truth.fits"))
	outside.Command(t, "fitsverify", "-q", filepath.Join(dir, "new-1.fits"))
}

func TestDemo(t *testing.T) {
	dir := t.TempDir()
	calls := 0
	d, err := writeDemo(context.Background(), dir, 1, 400, func(done, total int, file string) {
		calls++
		if done != calls || done > total {
			t.Errorf("progress %d of %d at call %d", done, total, calls)
		}
	})
	if err != nil {
		t.Fatal(err)
	}
	if calls != len(d.Frames)+len(d.Archive) {
		t.Errorf("%d progress calls for %d files", calls, len(d.Frames)+len(d.Archive))
	}
	expected := map[string]int{}
	for k, f := range d.Truth.Frames {
		expected[f.Expected]++
		if _, err := os.Stat(d.Frames[k]); err != nil {
			t.Error(err)
		}
		if f.Expected == "unreadable" {
			if file, err := fits.Open(d.Frames[k]); err == nil {
				if _, err := file.Image(0); err == nil {
					t.Error("the truncated file can be read")
				}
				file.Close()
			}
		}
	}
	for _, slug := range []string{"unreadable", "no_match", "too_few_stars"} {
		if expected[slug] != 1 {
			t.Errorf("%d frames expect %s, want 1", expected[slug], slug)
		}
	}
	if len(d.Supernovae) != 6 {
		t.Errorf("%d supernovae, want 6", len(d.Supernovae))
	}
	// Every supernova brightens until its maximum and gets bright enough to be found.
	for _, sn := range d.Supernovae {
		last, best := math.Inf(1), 0.0
		for _, s := range d.Sources {
			if s.ID == sn.ID {
				if s.Mag > last && d.Truth.Frame(s.Frame).MidMJD < sn.Supernova.PeakMJD {
					t.Errorf("%s fades", sn.ID)
				}
				last, best = s.Mag, math.Max(best, s.LocalSN)
			}
		}
		if best < 6 {
			t.Errorf("%s: best signal-to-noise ratio %.1f, want at least 6", sn.ID, best)
		}
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, err := WriteDemo(ctx, t.TempDir(), 1, nil); err != context.Canceled {
		t.Errorf("a cancelled run returned %v", err)
	}
}

func BenchmarkDirty2048(b *testing.B) {
	n, _ := baseConditions(2048, 1)
	presets["dirty"].tune(&n, &n)
	s := newScene(n.Camera.RA, n.Camera.Dec, sceneSide(&n), skyPlan{stars: 8, starMag: 20.2, slope: 0.3, bright: 12, faint: 23.4,
		galaxies: 0.6, galaxySlope: 0.4, galaxyMag: [2]float64{16.5, 20.5}, radius: [2]float64{0.8, 2.4}}, 1)
	b.ResetTimer()
	for b.Loop() {
		render(&n, s)
	}
	b.ReportMetric(float64(len(s.Stars)), "stars")
}

func BenchmarkStars4096(b *testing.B) {
	n, _ := baseConditions(4096, 1)
	s := newScene(n.Camera.RA, n.Camera.Dec, sceneSide(&n), skyPlan{stars: 0.45, starMag: 20.2, slope: 0.3, bright: 12, faint: 23.4,
		galaxySlope: 0.4, galaxyMag: [2]float64{16.5, 20.5}, radius: [2]float64{0.8, 2.4}}, 1)
	b.ResetTimer()
	for b.Loop() {
		render(&n, s)
	}
	b.ReportMetric(float64(len(s.Stars)), "stars")
}

// A changed scenario has what the change asks for: density, brightness, and
// trails of the length that the truth states.
func TestVaried(t *testing.T) {
	p, err := Varied("plain", Change{Events: 150, Brightest: 1000, Moving: 1, Tune: func(n, r *Conditions) { n.PSF.FWHM = 3 }}, 400, 5)
	if err != nil {
		t.Fatal(err)
	}
	bright, moving := 0.0, 0
	for _, s := range p.Truth.Sources {
		bright = math.Max(bright, s.LocalSN)
		if s.Kind != KindAsteroid {
			continue
		}
		moving++
		if s.Trail < 1.4 || s.Trail > 9.1 {
			t.Errorf("%s trails by %.2f px, expected 1.5 to 9", s.ID, s.Trail)
		}
	}
	if n := len(p.Truth.Sources); n < 20 || n > 24 || moving < 5 || bright < 200 || p.New[0].Conditions.PSF.FWHM != 3 {
		t.Errorf("%d events, %d moving, the brightest of %.0f sigma", n, moving, bright)
	}
	same, err := Varied("plain", Change{}, 200, 5)
	if err != nil {
		t.Fatal(err)
	}
	plain, err := Scenario("plain", 200, 5)
	if err != nil {
		t.Fatal(err)
	}
	if !slices.Equal(same.New[0].Pix, plain.New[0].Pix) {
		t.Error("no change is a change")
	}
}
