package psf

import (
	"fmt"
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

// add puts a star's mean light into the frame, out to radius r.
func (s *scene) add(x, y, flux float64, r int) {
	X, Y := 2*x/float64(s.w)-1, 2*y/float64(s.h)-1
	ci, cj := int(math.Round(x))-1, int(math.Round(y))-1
	for j := max(0, cj-r); j <= min(s.h-1, cj+r); j++ {
		for i := max(0, ci-r); i <= min(s.w-1, ci+r); i++ {
			u, v := float64(i+1)-x, float64(j+1)-y
			d := math.Hypot(u, v)
			n := 2
			if d < 4 {
				n = 9
			} else if d < 9 {
				n = 4
			}
			s.img.Pix[j*s.w+i] += float32(flux * integrate(s.p, u, v, X, Y, n))
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

var verbose bool

// compare gives, over 4×4 field positions, the mean and the largest relative
// bias of a flux got by least squares of the truth with the model, and the
// largest sqrt(Σ(model-truth)²/Σtruth²).
func compare(m *Model, s *scene) (mean, flux, norm float64) {
	size := 2*m.Radius() + 1
	dst := make([]float32, size*size)
	half := float64(m.Radius())
	var worstF, worstN float64
	rng := rand.New(rand.NewPCG(3, 3))
	for a := range 4 {
		for b := range 4 {
			X, Y := -0.9+0.6*float64(a), -0.9+0.6*float64(b)
			x, y := (X+1)/2*float64(s.w), (Y+1)/2*float64(s.h)
			dx, dy := rng.Float64()-0.5, rng.Float64()-0.5
			m.Render(dst, x, y, dx, dy)
			var best struct{ f, n float64 }
			best.n = math.Inf(1)
			// The model's centre is its own: allow a shift, by a small search.
			sx, sy := 0.0, 0.0
			step := 0.05
			eval := func(sx, sy float64) (f, n float64) {
				var tt, mt, mm float64
				r := min(m.Radius(), 12)
				for j := m.Radius() - r; j <= m.Radius()+r; j++ {
					for i := m.Radius() - r; i <= m.Radius()+r; i++ {
						n := 3
						u, v := float64(i)-half-dx-sx, float64(j)-half-dy-sy
						if math.Hypot(u, v) < 4 {
							n = 7
						}
						t := integrate(s.p, u, v, X, Y, n)
						g := float64(dst[j*size+i])
						tt += t * t
						mt += g * t
						mm += g * g
					}
				}
				return mt/mm - 1, math.Sqrt(math.Max(0, tt-2*mt+mm) / tt)
			}
			for range 20 {
				cx, cy := sx, sy
				for _, d := range [5][2]float64{{0, 0}, {1, 0}, {-1, 0}, {0, 1}, {0, -1}} {
					f, n := eval(cx+d[0]*step, cy+d[1]*step)
					if n < best.n {
						best.f, best.n = f, n
						sx, sy = cx+d[0]*step, cy+d[1]*step
					}
				}
				if sx == cx && sy == cy {
					step /= 3
				}
			}
			mean += best.f / 16
			if verbose {
				fmt.Printf("(%.1f %.1f: %.4f %.4f) ", X, Y, best.f, best.n)
			}
			worstF = math.Max(worstF, math.Abs(best.f))
			worstN = math.Max(worstN, best.n)
		}
	}
	return mean, worstF, worstN
}
