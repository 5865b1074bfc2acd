package detect

import (
	"context"
	"math"
	"math/rand/v2"
	"testing"

	"nightsift/internal/frame"
	"nightsift/internal/realbogus"
)

// gaussian is a pixel-integrated Gaussian PSF with a closed form: products of
// differences of the error function.
type gaussian struct{ sx, sy float64 }

func (g gaussian) Render(dst []float32, size int, x, y, dx, dy float64) {
	c := size / 2
	px, py := make([]float64, size), make([]float64, size)
	for i := range size {
		px[i] = erfBin(float64(i-c)-dx, g.sx)
		py[i] = erfBin(float64(i-c)-dy, g.sy)
	}
	for j := range size {
		for i := range size {
			dst[j*size+i] = float32(px[i] * py[j])
		}
	}
}

func erfBin(d, s float64) float64 {
	return (math.Erf((d+0.5)/(s*math.Sqrt2)) - math.Erf((d-0.5)/(s*math.Sqrt2))) / 2
}

// moffat is a Moffat profile of exponent beta, integrated over the pixels of the
// core by Gauss–Legendre quadrature of 5 × 5 points.
type moffat struct{ fwhm, beta float64 }

func (m moffat) Render(dst []float32, size int, x, y, dx, dy float64) {
	a := m.fwhm / 2 / math.Sqrt(math.Pow(2, 1/m.beta)-1)
	norm := (m.beta - 1) / (math.Pi * a * a)
	nodes := [5]float64{0, 0.5384693101056831, -0.5384693101056831, 0.9061798459386640, -0.9061798459386640}
	weights := [5]float64{0.5688888888888889, 0.4786286704993665, 0.4786286704993665, 0.2369268850561891, 0.2369268850561891}
	c := size / 2
	for j := range size {
		for i := range size {
			if d := math.Hypot(float64(i-c)-dx, float64(j-c)-dy); d > 1.5*m.fwhm { // far out the middle of the pixel will do
				dst[j*size+i] = float32(norm * math.Pow(1+d*d/(a*a), -m.beta))
				continue
			}
			var s float64
			for p := range nodes {
				for q := range nodes {
					u, v := float64(i-c)-dx+nodes[p]/2, float64(j-c)-dy+nodes[q]/2
					s += weights[p] * weights[q] * math.Pow(1+(u*u+v*v)/(a*a), -m.beta)
				}
			}
			dst[j*size+i] = float32(norm * s / 4)
		}
	}
}

// scene is an invented difference on which tests search.
type scene struct {
	input
	psf     renderer
	sky     float64 // variance of a pixel
	rng     *rand.Rand
	photons bool
}

func newScene(w, h int, psf renderer, sigma float64, seed uint64) *scene {
	s := &scene{psf: psf, sky: sigma * sigma, rng: rand.New(rand.NewPCG(seed, 77))}
	s.input = input{
		image: frame.NewImage(w, h), variance: frame.NewImage(w, h), significance: frame.NewImage(w, h),
		newSub: frame.NewImage(w, h), reference: frame.NewImage(w, h), flags: frame.NewMask(w, h),
		psf: psf, gain: math.NaN(), zeroPoint: 25, scaleError: 0.003, jitter: 0.01, pixelScale: 1,
	}
	for k := range s.image.Pix {
		s.image.Pix[k] = float32(sigma * s.rng.NormFloat64())
		s.variance.Pix[k] = float32(sigma * sigma)
	}
	return s
}

// add puts a point source in, with photon noise when the scene has it.
func (s *scene) add(x, y, flux float64) {
	const size = 61
	stamp := make([]float32, size*size)
	ci, cj := int(math.Round(x)), int(math.Round(y))
	s.psf.Render(stamp, size, x, y, x-float64(ci), y-float64(cj))
	for b := range size {
		for a := range size {
			i, j := ci-1+a-size/2, cj-1+b-size/2
			if i < 0 || j < 0 || i >= s.image.Width || j >= s.image.Height {
				continue
			}
			v := flux * float64(stamp[b*size+a])
			if v > 0 {
				s.newSub.Pix[j*s.image.Width+i] += float32(v)
			} else { // light that only the reference has
				s.reference.Pix[j*s.image.Width+i] -= float32(v)
			}
			if s.photons && v > 0 {
				v += math.Sqrt(v/s.gain) * s.rng.NormFloat64()
			}
			s.image.Pix[j*s.image.Width+i] += float32(v)
		}
	}
}

// score fills the significance with the matched filter of equal variance.
func (s *scene) score() {
	const size = 25
	stamp := make([]float32, size*size)
	s.psf.Render(stamp, size, 1, 1, 0, 0)
	var s2 float64
	for _, v := range stamp {
		s2 += float64(v) * float64(v)
	}
	norm := 1 / math.Sqrt(s2*s.sky)
	w, h := s.image.Width, s.image.Height
	s.significance = frame.NewImage(w, h)
	acc := make([]float64, w)
	masked := s.image.Clone()
	for k, b := range s.flags.Bits {
		if b&excluded != 0 {
			masked.Pix[k] = 0
		}
	}
	for j := range h {
		clear(acc)
		for b := range size {
			jj := j + b - size/2
			if jj < 0 || jj >= h {
				continue
			}
			clean := masked.Row(jj)
			for a := range size {
				p := float64(stamp[b*size+a])
				if p < 1e-5 {
					continue
				}
				o := a - size/2
				for i := max(0, -o); i < min(w, w-o); i++ {
					acc[i] += p * float64(clean[i+o])
				}
			}
		}
		out, bits := s.significance.Row(j), s.flags.Row(j)
		for i := range out {
			if bits[i]&excluded == 0 {
				out[i] = float32(acc[i] * norm)
			}
		}
	}
}

// unit returns the flux of a source with a signal to noise of 1.
func (s *scene) unit() float64 {
	const size = 61
	stamp := make([]float32, size*size)
	s.psf.Render(stamp, size, 1, 1, 0, 0)
	var s2 float64
	for _, v := range stamp {
		s2 += float64(v) * float64(v)
	}
	return math.Sqrt(s.sky / s2)
}

func (s *scene) find(t testing.TB, cfg Config) []Candidate {
	t.Helper()
	model := realbogus.Prior()
	sr, err := newSearch(&s.input, &cfg, model)
	if err != nil {
		t.Fatal(err)
	}
	out, err := sr.run(context.Background())
	if err != nil {
		t.Fatal(err)
	}
	return out
}

// nearest returns the candidate nearest to a place within r px, or nil.
func nearest(c []Candidate, x, y, r float64) *Candidate {
	var best *Candidate
	for k := range c {
		if d := math.Hypot(c[k].X-x, c[k].Y-y); d <= r {
			r, best = d, &c[k]
		}
	}
	return best
}
