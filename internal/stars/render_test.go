package stars

import (
	"math"
	"math/rand/v2"

	"nightsift/internal/frame"
)

// An independent little renderer: what the tests know to be true.

func random(seed uint64) *rand.Rand { return rand.New(rand.NewPCG(seed, 11)) }

// profile is a unit-flux surface brightness [1/px²] at offset (u,v) px.
type profile func(u, v float64) float64

// moffat returns a Moffat profile; axis is minor/major, angle [rad] of the
// major axis, fwhm the geometric mean of both axes'.
func moffat(fwhm, beta, axis, angle float64) profile {
	alpha := fwhm / (2 * math.Sqrt(math.Pow(2, 1/beta)-1))
	norm := (beta - 1) / (math.Pi * alpha * alpha)
	c, s := math.Cos(angle), math.Sin(angle)
	return func(u, v float64) float64 {
		a, b := (c*u+s*v)*math.Sqrt(axis), (c*v-s*u)/math.Sqrt(axis)
		return norm * math.Pow(1+(a*a+b*b)/(alpha*alpha), -beta)
	}
}

func gaussian(fwhm, axis, angle float64) profile {
	sigma := fwhm / math.Sqrt(8*math.Ln2)
	c, s := math.Cos(angle), math.Sin(angle)
	return func(u, v float64) float64 {
		a, b := (c*u+s*v)*math.Sqrt(axis), (c*v-s*u)/math.Sqrt(axis)
		return math.Exp(-(a*a+b*b)/(2*sigma*sigma)) / (2 * math.Pi * sigma * sigma)
	}
}

// exponential is a galaxy's disc with the given half-light radius.
func exponential(half, axis, angle float64) profile {
	h := half / 1.678
	c, s := math.Cos(angle), math.Sin(angle)
	norm := 1 / (2 * math.Pi * h * h)
	return func(u, v float64) float64 {
		a, b := (c*u+s*v)*math.Sqrt(axis), (c*v-s*u)/math.Sqrt(axis)
		return norm * math.Exp(-math.Hypot(a, b)/h)
	}
}

// add puts a source at FITS position (x,y), integrated over each pixel by
// 3 × 3-point Gauss-Legendre quadrature near the centre.
func add(img *frame.Image, x, y, flux float64, p profile, radius int) {
	node := [3]float64{-math.Sqrt(0.15), 0, math.Sqrt(0.15)}
	weight := [3]float64{5. / 18, 8. / 18, 5. / 18}
	cx, cy := int(math.Round(x))-1, int(math.Round(y))-1
	for j := max(0, cy-radius); j <= min(img.Height-1, cy+radius); j++ {
		for i := max(0, cx-radius); i <= min(img.Width-1, cx+radius); i++ {
			u, v := float64(i+1)-x, float64(j+1)-y
			r := u*u + v*v
			if r > float64(radius*radius) {
				continue
			}
			f := 0.0
			if r > 144 {
				f = p(u, v)
			} else {
				for a := range node {
					for b := range node {
						f += weight[a] * weight[b] * p(u+node[a], v+node[b])
					}
				}
			}
			img.Pix[j*img.Width+i] += float32(flux * f)
		}
	}
}

// expose adds sky and noise: photons of sky and sources at the given gain
// [electron/count] and read noise [electron]. Without gain (0) the noise is
// white with the sigma in read [count].
func expose(img *frame.Image, sky func(i, j int) float64, gain, read float64, rng *rand.Rand) {
	for j := 0; j < img.Height; j++ {
		for i := 0; i < img.Width; i++ {
			p := &img.Pix[j*img.Width+i]
			v := float64(*p) + sky(i, j)
			sigma := read
			if gain > 0 {
				sigma = math.Sqrt(max(0, v)*gain+read*read) / gain
			}
			*p = float32(v + sigma*rng.NormFloat64())
		}
	}
}

func level(v float64) func(i, j int) float64 { return func(int, int) float64 { return v } }

// scatter draws n stars with Euclidean counts between two fluxes at random
// places; it returns x, y, flux.
func scatter(n, width, height int, faint, bright float64, rng *rand.Rand) [][3]float64 {
	list := make([][3]float64, n)
	for k := range list {
		u := rng.Float64()
		a, b := math.Pow(faint, -0.8), math.Pow(bright, -0.8)
		list[k] = [3]float64{0.5 + float64(width)*rng.Float64(), 0.5 + float64(height)*rng.Float64(), math.Pow(a+u*(b-a), -1/0.8)}
	}
	return list
}

// reach is the radius at which a Moffat star of this flux drops below the
// given surface brightness.
func reach(flux, fwhm, beta, limit float64) int {
	p := moffat(fwhm, beta, 1, 0)
	r := 8.0
	for r < 200 && flux*p(r, 0) > limit {
		r *= 1.1
	}
	return int(r)
}
