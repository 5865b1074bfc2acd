package psf

import (
	"math"
	"math/rand/v2"

	"nightsift/internal/frame"
	"nightsift/internal/stars"
)

// The tests' own sky, which shares no code with the package: light is a closed
// form of unit total flux, integrated over pixels by brute force.

// density is the light per px² at offset (u,v) from a source at scaled field
// position (X,Y) in [-1,1].
type density func(u, v, X, Y float64) float64

// stretch gives an elliptical radius² for a size and two elongations.
func stretch(u, v, e1, e2 float64) (r2, jac float64) {
	// u' = (1-e1)u - e2 v ; v' = -e2 u + (1+e1) v
	a, b := (1-e1)*u-e2*v, -e2*u+(1+e1)*v
	return a*a + b*b, math.Abs((1-e1)*(1+e1) - e2*e2)
}

func trueMoffat(beta float64, fwhm func(X, Y float64) (f, e1, e2 float64)) density {
	return func(u, v, X, Y float64) float64 {
		f, e1, e2 := fwhm(X, Y)
		alpha := f / 2 / math.Sqrt(math.Pow(2, 1/beta)-1)
		r2, jac := stretch(u, v, e1, e2)
		return jac * (beta - 1) / (math.Pi * alpha * alpha) * math.Pow(1+r2/(alpha*alpha), -beta)
	}
}

func trueGauss(fwhm func(X, Y float64) (f, e1, e2 float64)) density {
	return func(u, v, X, Y float64) float64 {
		f, e1, e2 := fwhm(X, Y)
		s2 := f * f / (8 * math.Ln2)
		r2, jac := stretch(u, v, e1, e2)
		return jac / (2 * math.Pi * s2) * math.Exp(-r2/2/s2)
	}
}

func mix(w float64, a, b density) density {
	return func(u, v, X, Y float64) float64 { return w*a(u, v, X, Y) + (1-w)*b(u, v, X, Y) }
}

func times(k float64, f func(X, Y float64) (float64, float64, float64)) func(X, Y float64) (float64, float64, float64) {
	return func(X, Y float64) (float64, float64, float64) {
		a, b, c := f(X, Y)
		return a * k, b, c
	}
}

// kolmogorov is the sum of two Moffat profiles of Racine (1996, PASP 108, 699):
// 0.86 of β = 7 and 0.14 of β = 2 in the peak, same FWHM for both here.
func kolmogorov(f func(X, Y float64) (float64, float64, float64)) density {
	return mix(0.75, trueMoffat(7, f), trueMoffat(2.4, times(1.05, f)))
}

// coma adds a fainter, displaced image on one side that grows across the field.
func coma(base density, width float64) density {
	return func(u, v, X, Y float64) float64 {
		d := width * 0.45
		k := 0.12 + 0.08*X
		return (1-k)*base(u, v, X, Y) + k*base(u-d, v-0.5*d*Y, X, Y)
	}
}

// field with FWHM ±10 % and a gradient of elongation.
func varying(fwhm float64) func(X, Y float64) (f, e1, e2 float64) {
	return func(X, Y float64) (float64, float64, float64) {
		return fwhm * (1 + 0.07*X + 0.03*Y*Y - 0.015), 0.05 * Y, 0.04*X + 0.02*X*Y
	}
}

func constant(fwhm float64) func(X, Y float64) (f, e1, e2 float64) {
	return func(X, Y float64) (float64, float64, float64) { return fwhm, 0, 0 }
}

type trueStar struct{ x, y, flux float64 }

type scene struct {
	w, h      int
	p         density
	sky       float64 // variance
	gain      float64
	img, var_ *frame.Image
	flags     *frame.Mask
	truth     []trueStar
	list      []stars.Star
	rng       *rand.Rand
}

func newScene(w, h int, p density, sky, gain float64, seed uint64) *scene {
	s := &scene{w: w, h: h, p: p, sky: sky, gain: gain, img: frame.NewImage(w, h), var_: frame.NewImage(w, h), flags: frame.NewMask(w, h)}
	s.rng = rand.New(rand.NewPCG(seed, 7))
	for k := range s.var_.Pix {
		s.var_.Pix[k] = float32(sky)
	}
	return s
}

// integrate is the light in the pixel at offset (u,v), by n×n midpoints.
func integrate(p density, u, v, X, Y float64, n int) float64 {
	var sum float64
	for j := range n {
		for i := range n {
			sum += p(u+(float64(i)+0.5)/float64(n)-0.5, v+(float64(j)+0.5)/float64(n)-0.5, X, Y)
		}
	}
	return sum / float64(n*n)
}

// samples is how many midpoints along each axis a pixel at distance d needs.
func samples(d float64) int {
	switch {
	case d < 3.5:
		return 9
	case d < 8:
		return 3
	}
	return 1
}

// add puts a star's mean light into the frame, out to radius r.
func (s *scene) add(x, y, flux float64, r int) {
	X, Y := 2*x/float64(s.w)-1, 2*y/float64(s.h)-1
	ci, cj := int(math.Round(x))-1, int(math.Round(y))-1
	for j := max(0, cj-r); j <= min(s.h-1, cj+r); j++ {
		for i := max(0, ci-r); i <= min(s.w-1, ci+r); i++ {
			u, v := float64(i+1)-x, float64(j+1)-y
			s.img.Pix[j*s.w+i] += float32(flux * integrate(s.p, u, v, X, Y, samples(math.Hypot(u, v))))
		}
	}
	s.truth = append(s.truth, trueStar{x, y, flux})
}

// scatter adds n stars with fluxes as power law between lo and hi, no two
// closer than gap.
func (s *scene) scatter(n int, lo, hi, gap, slope float64, r int) {
	for tries := 0; n > 0 && tries < 100000; tries++ {
		x, y := 12+s.rng.Float64()*float64(s.w-24), 12+s.rng.Float64()*float64(s.h-24)
		ok := true
		for _, t := range s.truth {
			if math.Hypot(t.x-x, t.y-y) < gap {
				ok = false
				break
			}
		}
		if !ok {
			continue
		}
		u := s.rng.Float64()
		a, b := math.Pow(lo, -slope), math.Pow(hi, -slope)
		s.add(x, y, math.Pow(a+(b-a)*u, -1/slope), r)
		n--
	}
}

// expose adds the noise and makes the star list, with the errors a list has.
func (s *scene) expose(posErr float64) {
	for k, v := range s.img.Pix {
		vr := s.sky
		if s.gain > 0 {
			vr += math.Max(float64(v), 0) / s.gain
		}
		s.img.Pix[k] = v + float32(math.Sqrt(vr)*s.rng.NormFloat64())
	}
	for i, t := range s.truth {
		// Optimal error with 30 px of sky.
		e := math.Sqrt(30*s.sky + t.flux/math.Max(s.gain, 1e-9)*b2f(s.gain > 0))
		near := math.Inf(1)
		for j, o := range s.truth {
			if j != i && o.flux > 0.03*t.flux {
				near = math.Min(near, math.Hypot(o.x-t.x, o.y-t.y))
			}
		}
		s.list = append(s.list, stars.Star{
			X: t.x + posErr*s.rng.NormFloat64(), Y: t.y + posErr*s.rng.NormFloat64(),
			Flux: t.flux * (1 + 0.02*s.rng.NormFloat64()), FluxErr: e, SN: t.flux / e,
			Neighbour: near, Clean: near > 12 && t.flux/e > 20,
		})
	}
}

func b2f(b bool) float64 {
	if b {
		return 1
	}
	return 0
}

// compare gives, over 4×4 field positions, the mean and the largest relative
// bias of a flux got by least squares of the noise-free truth with the model,
// and the largest sqrt(Σ(model-truth)²/Σtruth²). The model may choose where its
// centre is.
func compare(m *Model, s *scene) (mean, flux, norm float64) {
	const r = 12
	const size = 2*r + 1
	truth := make([]float64, size*size)
	p, gx, gy := make([]float32, size*size), make([]float32, size*size), make([]float32, size*size)
	rng := rand.New(rand.NewPCG(3, 3))
	for a := range 4 {
		for b := range 4 {
			X, Y := -0.9+0.6*float64(a), -0.9+0.6*float64(b)
			x, y := (X+1)/2*float64(s.w), (Y+1)/2*float64(s.h)
			dx, dy := rng.Float64()-0.5, rng.Float64()-0.5
			var tt float64
			for j := range size {
				for i := range size {
					u, v := float64(i)-r-dx, float64(j)-r-dy
					t := integrate(s.p, u, v, X, Y, samples(math.Hypot(u, v)))
					truth[j*size+i] = t
					tt += t * t
				}
			}
			f, rr := 1.0, 0.0
			for range 6 {
				m.RenderGradient(p, gx, gy, x, y, dx, dy)
				var n [9]float64
				var g [3]float64
				rr = 0
				for k, t := range truth {
					jac := [3]float64{float64(p[k]), f * float64(gx[k]), f * float64(gy[k])}
					res := t - f*jac[0]
					rr += res * res
					for c := range 3 {
						g[c] += jac[c] * res
						for d := range 3 {
							n[c*3+d] += jac[c] * jac[d]
						}
					}
				}
				if !cholesky(n[:], 3) {
					panic("singular")
				}
				choleskySolve(n[:], 3, g[:])
				f += g[0]
				dx += g[1]
				dy += g[2]
			}
			mean += (f - 1) / 16
			flux = math.Max(flux, math.Abs(f-1))
			norm = math.Max(norm, math.Sqrt(rr/tt))
		}
	}
	return mean, flux, norm
}
