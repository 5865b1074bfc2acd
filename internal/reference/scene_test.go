package reference

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"nightsift/internal/fits"
)

// A sky drawn for these tests straight from formulas: stars of Moffat's profile,
// integrated over pixels by Gauss's rule, on flat sky with Poisson and read noise.

type skyStar struct{ x, y, flux float64 } // px and count of the first frame's grid

type shot struct {
	width, height int
	dx, dy, angle float64 // px, rad: place of the grid's centre and rotation
	pixel         float64 // side of a pixel in those of the grid
	fwhm, beta    float64 // px of the grid
	throughput    float64 // counts for one of the sky's
	sky           float64 // count
	gain, read    float64
	saturation    float64
	mjd           float64
	filter        string
	extra         []skyStar // light on this frame only
	rays          int       // particle hits
	seed          uint64
	header        map[string]any
	noiseless     bool
}

func defaultShot(k int) shot {
	return shot{width: 512, height: 512, pixel: 1, fwhm: 4, beta: 3, throughput: 1, sky: 400, gain: 1.5, read: 6, saturation: 60000,
		mjd: 60000 + float64(k), filter: "r", seed: uint64(1000 + k)}
}

// drawSky draws stars whose cumulative number falls with the flux to the power
// of -0.6, as counts of faint stars do, over three decades.
func drawSky(n int, side float64, brightest float64, seed uint64) []skyStar {
	r := rand.New(rand.NewPCG(seed, 1))
	var out []skyStar
	for range n {
		x, y := (r.Float64()-0.5)*side, (r.Float64()-0.5)*side
		out = append(out, skyStar{x, y, brightest / 1000 * math.Min(math.Pow(1-r.Float64(), -1/0.6), 1000)})
	}
	return out
}

var gaussX = [3]float64{-0.7745966692414834 / 2, 0, 0.7745966692414834 / 2}
var gaussW = [3]float64{5. / 18, 8. / 18, 5. / 18}

// moffat is the profile of total 1 at (x,y), integrated over a pixel of side h.
func moffat(x, y, fwhm, beta, h float64) float64 {
	alpha := fwhm / (2 * math.Sqrt(math.Pow(2, 1/beta)-1))
	norm := (beta - 1) / (math.Pi * alpha * alpha)
	s := 0.0
	for j, wy := range gaussW {
		for i, wx := range gaussW {
			a, b := x+h*gaussX[i], y+h*gaussX[j]
			s += wx * wy * math.Pow(1+(a*a+b*b)/(alpha*alpha), -beta)
		}
	}
	return s * norm * h * h
}

// at returns the shot's pixel (FITS) of a place of the sky.
func (s *shot) at(x, y float64) (u, v float64) {
	c, d := math.Cos(s.angle), math.Sin(s.angle)
	x, y = x-s.dx, y-s.dy
	return (c*x+d*y)/s.pixel + float64(s.width+1)/2, (-d*x+c*y)/s.pixel + float64(s.height+1)/2
}

func (s *shot) render(sky []skyStar) []float32 {
	light := make([]float64, s.width*s.height)
	for _, list := range [][]skyStar{sky, s.extra} {
		for _, star := range list {
			u, v := s.at(star.x, star.y)
			radius := math.Min(8, 3+math.Log10(math.Max(star.flux, 10))) * s.fwhm / s.pixel
			for j := max(int(v-radius), 0); j < min(int(v+radius), s.height); j++ {
				for i := max(int(u-radius), 0); i < min(int(u+radius), s.width); i++ {
					light[j*s.width+i] += star.flux * s.throughput * moffat(s.pixel*(float64(i+1)-u), s.pixel*(float64(j+1)-v), s.fwhm, s.beta, s.pixel)
				}
			}
		}
	}
	r := rand.New(rand.NewPCG(s.seed, 2))
	pix := make([]float32, len(light))
	for p, l := range light {
		mean := l + s.sky
		sigma := math.Sqrt(mean/s.gain + s.read*s.read/s.gain/s.gain)
		if s.noiseless {
			sigma = 0
		}
		pix[p] = float32(math.Min(mean+sigma*r.NormFloat64(), s.saturation))
	}
	for range s.rays {
		i, j := 1+r.IntN(s.width-3), 1+r.IntN(s.height-3)
		for k := range 1 + r.IntN(3) {
			pix[j*s.width+i+k] += float32(500 + 5000*r.Float64())
		}
	}
	return pix
}

func (s *shot) write(t testing.TB, path string, sky []skyStar) {
	t.Helper()
	h := &fits.Header{}
	h.Set("GAIN", s.gain, "")
	h.Set("RDNOISE", s.read, "")
	h.Set("SATURATE", s.saturation, "")
	h.Set("EXPTIME", 60.0, "")
	h.Set("MJD-AVG", s.mjd, "")
	h.Set("FILTER", s.filter, "")
	h.Set("OBJECT", "Field 1", "")
	h.Set("MAGZP", 25+2.5*math.Log10(s.throughput), "")
	// The grid has one arcsec a pixel about (150, -20), east to the left.
	h.Set("CTYPE1", "RA---TAN", "")
	h.Set("CTYPE2", "DEC--TAN", "")
	h.Set("CRVAL1", 150.0, "")
	h.Set("CRVAL2", -20.0, "")
	u, v := s.at(0, 0)
	h.Set("CRPIX1", u, "")
	h.Set("CRPIX2", v, "")
	c, d, q := math.Cos(s.angle), math.Sin(s.angle), s.pixel/3600
	h.Set("CD1_1", -c*q, "")
	h.Set("CD1_2", d*q, "")
	h.Set("CD2_1", d*q, "")
	h.Set("CD2_2", c*q, "")
	for key, value := range s.header {
		if value == nil {
			h.Delete(key)
		} else {
			h.Set(key, value, "")
		}
	}
	if err := fits.WritePrimary(path, &fits.ImageHDU{Header: h, Width: s.width, Height: s.height, Float: s.render(sky)}); err != nil {
		t.Fatal(err)
	}
}

// shots writes n frames, each after change, and returns their paths.
func shots(t testing.TB, sky []skyStar, n int, change func(k int, s *shot)) []string {
	t.Helper()
	dir := t.TempDir()
	var paths []string
	for k := range n {
		s := defaultShot(k)
		if change != nil {
			change(k, &s)
		}
		path := filepath.Join(dir, fmt.Sprintf("frame-%02d.fits", k))
		s.write(t, path, sky)
		paths = append(paths, path)
	}
	return paths
}

// jitter gives each frame its own pointing.
func jitter(k int, s *shot) {
	r := rand.New(rand.NewPCG(uint64(k), 77))
	s.dx, s.dy, s.angle = 12*(r.Float64()-0.5), 12*(r.Float64()-0.5), 0.01*(r.Float64()-0.5)
}

func writeFile(t testing.TB, path string, content []byte) {
	t.Helper()
	if err := os.WriteFile(path, content, 0o644); err != nil {
		t.Fatal(err)
	}
}

// quick holds settings that keep fits of the point-spread function short: the
// frames of these tests do not vary over the field.
func quick(t testing.TB) Config {
	cfg := DefaultConfig()
	cfg.Scratch = t.TempDir()
	cfg.PSF.MaxStars, cfg.PSF.ShapeOrder, cfg.PSF.GridOrder = 40, 1, 0
	return cfg
}

func build(t testing.TB, paths []string, cfg Config) *Product {
	t.Helper()
	p, err := Build(context.Background(), paths, cfg)
	if err != nil {
		t.Fatal(err)
	}
	return p
}

func small(k int, s *shot) {
	jitter(k, s)
	s.width, s.height = 300, 300
	s.fwhm = 3.2 + 0.15*float64(k)
	s.throughput = 1 - 0.05*float64(k%3)
	s.rays = 3
}

var smallSky = drawSky(90, 330, 8e5, 3)
