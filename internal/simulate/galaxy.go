package simulate

import (
	"math"
	"math/rand/v2"
	"sync"
)

// Galaxy is an elliptical Sérsic profile (Sérsic 1963; constants after Ciotti &
// Bertin 1999, A&A 352, 447).
type Galaxy struct {
	ID      string
	RA, Dec float64 // deg
	Mag     float64
	Sersic  float64 // index n, 0.5 to 6
	Radius  float64 // arcsec, half-light radius of the ellipse (geometric mean axis)
	Ratio   float64 // minor over major axis
	Angle   float64 // deg, of the major axis from north through east
	Z       float64 // redshift
}

// sersicB is the b_n for which half of the light lies within the half-light
// radius (Ciotti & Bertin 1999, eq. 18; good to 1e-6 for n > 0.36).
func sersicB(n float64) float64 {
	return 2*n - 1.0/3 + 4/(405*n) + 46/(25515*n*n) + 131/(1148175*n*n*n) - 2194697/(30690717750*n*n*n*n)
}

// sersicDensity is the light per unit area at radius r (in half-light radii)
// of a profile of unit total.
func sersicDensity(n, r float64) float64 {
	b := sersicB(n)
	total := 2 * math.Pi * n * math.Pow(b, -2*n) * math.Gamma(2*n)
	return math.Exp(-b*math.Pow(r, 1/n)) / total
}

var sersicCache sync.Map // of int (index in steps of 0.25) to []component

// sersicMixture writes a round Sérsic profile of unit half-light radius as a sum
// of Gaussians; for n ≥ 0.5 the profile is a positive mixture of Gaussians. The
// weights are found by expectation maximisation, the total is 1. The index is
// rounded to the next quarter. Beyond twelve half-light radii the light ends.
//
// The mixture, not the formula, is what a galaxy of this package is; it is the
// same in every frame.
func sersicMixture(n float64) []component {
	key := int(math.Round(n * 4))
	if m, ok := sersicCache.Load(key); ok {
		return m.([]component)
	}
	n = float64(key) / 4
	const (
		shells = 500
		inner  = 0.002
		outer  = 12
	)
	lo, hi, count := 0.012, 5.0, 18
	if n < 2 {
		lo, hi, count = 0.08, 2.2, 12
	}
	var r, f [shells]float64 // shell radius, light in it
	step := math.Log(outer/inner) / shells
	sum := 0.0
	for i := range r {
		r[i] = inner * math.Exp(step*(float64(i)+0.5))
		f[i] = 2 * math.Pi * r[i] * r[i] * sersicDensity(n, r[i])
		sum += f[i]
	}
	list := make([]component, count)
	kernel := make([][shells]float64, count)
	for k := range list {
		s := lo * math.Pow(hi/lo, float64(k)/float64(count-1))
		list[k] = component{1 / float64(count), s * s}
		for i := range r {
			kernel[k][i] = r[i] * r[i] / (s * s) * math.Exp(-r[i]*r[i]/(2*s*s))
		}
	}
	for range 400 {
		var model [shells]float64
		for k, c := range list {
			for i, v := range kernel[k] {
				model[i] += c.w * v
			}
		}
		total := 0.0
		for k := range list {
			g := 0.0
			for i, v := range kernel[k] {
				g += f[i] / sum * v / (model[i] + 1e-300)
			}
			list[k].w *= g
			total += list[k].w
		}
		for k := range list {
			list[k].w /= total
		}
	}
	kept := list[:0]
	total := 0.0
	for _, c := range list {
		if c.w > 1e-5 {
			kept = append(kept, c)
			total += c.w
		}
	}
	for k := range kept {
		kept[k].w /= total
	}
	sersicCache.Store(key, kept)
	return kept
}

// covariance returns re² times the ellipse's shape in the plane of east and
// north [arcsec²], of determinant re⁴.
func (g *Galaxy) covariance() (ee, en, nn float64) {
	s, c := math.Sincos(g.Angle * deg)
	a, b := g.Radius*g.Radius/g.Ratio, g.Radius*g.Radius*g.Ratio
	// Major axis along (east, north) = (sin, cos).
	return a*s*s + b*c*c, (a - b) * s * c, a*c*c + b*s*s
}

// pointInside draws a position following the galaxy's light, within limit
// half-light radii. It returns the offset east and north [arcsec].
func (g *Galaxy) pointInside(r *rand.Rand, limit float64) (east, north float64) {
	mix := sersicMixture(g.Sersic)
	for {
		u, k := r.Float64(), 0
		for k < len(mix)-1 && u > mix[k].w {
			u -= mix[k].w
			k++
		}
		s := math.Sqrt(mix[k].v)
		a, b := s*r.NormFloat64(), s*r.NormFloat64()
		if a*a+b*b > limit*limit {
			continue
		}
		q := math.Sqrt(g.Ratio)
		a, b = a*g.Radius/q, b*g.Radius*q // along major and minor axis
		sin, cos := math.Sincos(g.Angle * deg)
		return a*sin - b*cos, a*cos + b*sin
	}
}

// addGalaxy adds a galaxy convolved with the PSF: every Gaussian of the one
// mixture with every Gaussian of the other, covariances added. Each component
// is drawn where it exceeds limit [count/px].
func (p *plane) addGalaxy(c *Camera, s shape, psf []component, g *Galaxy, x, y, flux, limit float64) {
	j := c.jacobian(x, y)
	ee, en, nn := g.covariance()
	gxx, gxy, gyy := congruence(j, ee, en, nn)
	for _, a := range sersicMixture(g.Sersic) {
		for _, b := range psf {
			w := flux * a.w * b.w
			p.addGaussian(x, y, w,
				a.v*gxx+b.v*s.cxx, a.v*gxy+b.v*s.cxy, a.v*gyy+b.v*s.cyy, limit/8)
		}
	}
}

// addGaussian adds an elliptical Gaussian of given flux and covariance, pixel
// integrated, where it exceeds limit. Wide ones are integrated over the pixel by
// adding 1/12 to the covariance, narrow ones by quadrature. Along a row the
// exponential of a quadratic is advanced by two products a pixel.
func (p *plane) addGaussian(x, y, flux, cxx, cxy, cyy, limit float64) {
	n := 1
	small := math.Min(cxx, cyy)
	switch {
	case small > 12:
		cxx, cyy = cxx+1.0/12, cyy+1.0/12
	case small > 1:
		n = 3
	default:
		n = 4
	}
	det := cxx*cyy - cxy*cxy
	amp := flux / (2 * math.Pi * math.Sqrt(det))
	if math.Abs(amp) <= limit {
		return
	}
	k := math.Sqrt(2 * math.Log(math.Abs(amp)/limit))
	ixx, ixy, iyy := cyy/det, -cxy/det, cxx/det
	hy := k*math.Sqrt(cyy) + 1
	j0, j1 := max(0, int(math.Ceil(y-1-hy))), min(p.h-1, int(math.Floor(y-1+hy)))
	for j := j0; j <= j1; j++ {
		row := p.pix[j*p.w : (j+1)*p.w]
		for _, b := range legendre[n] {
			dy := float64(j+1) - y + b.x
			// Along this row the maximum is at u0 with half width from k.
			u0 := -ixy * dy / ixx
			q := iyy*dy*dy - ixy*ixy*dy*dy/ixx
			rest := k*k - q
			if rest <= 0 {
				if n == 1 {
					continue
				}
				rest = 0
			}
			half := math.Sqrt(rest/ixx) + 1
			i0, i1 := max(0, int(math.Ceil(x-1+u0-half))), min(p.w-1, int(math.Floor(x-1+u0+half)))
			if i0 > i1 {
				continue
			}
			for _, a := range legendre[n] {
				u := float64(i0+1) - x + a.x - u0
				v := amp * b.w * a.w * math.Exp(-0.5*(q+ixx*u*u))
				step := math.Exp(-ixx * (u + 0.5))
				turn := math.Exp(-ixx)
				for i := i0; i <= i1; i++ {
					row[i] += float32(v)
					v *= step
					step *= turn
				}
			}
		}
	}
}
