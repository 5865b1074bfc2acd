package simulate

import "math"

// PSF is a point-spread function that varies over the field: an elliptical
// Moffat profile (Moffat 1969, A&A 3, 455), or a Gaussian when Beta is 0,
// integrated over square pixels. Its sum to infinity is 1.
//
// X and Y in the gradients are frame coordinates scaled to [-1, 1].
type PSF struct {
	Beta   float64 // Moffat exponent, > 1; 0 for a Gaussian
	FWHM   float64 // px, geometric mean of the axes at the centre, before pixel integration
	E1, E2 float64 // (a-b)/(a+b) times cos 2φ and sin 2φ, φ from +x towards +y
	// Relative change of FWHM per unit X, Y and X²+Y².
	FWHMX, FWHMY, FWHMR float64
	// Change of E1 and E2 per unit X and Y.
	E1X, E1Y, E2X, E2Y float64
}

// shape is the PSF at one place: r² = dᵀ C⁻¹ d, profile (1+r²)^-β with C = α²
// times a matrix of determinant 1, or exp(-r²/2) with C the covariance.
type shape struct {
	beta          float64
	fwhm          float64
	cxx, cxy, cyy float64 // C [px²]
}

func (p *PSF) at(c *Camera, x, y float64) shape {
	cx, cy := c.centre()
	X, Y := (x-cx)/(float64(c.Width)/2), (y-cy)/(float64(c.Height)/2)
	// Beyond the frame the trend stops, so that no far source gets a negative width.
	X, Y = math.Max(-1.1, math.Min(1.1, X)), math.Max(-1.1, math.Min(1.1, Y))
	fwhm := p.FWHM * (1 + p.FWHMX*X + p.FWHMY*Y + p.FWHMR*(X*X+Y*Y))
	e1 := p.E1 + p.E1X*X + p.E1Y*Y
	e2 := p.E2 + p.E2X*X + p.E2Y*Y
	return newShape(p.Beta, fwhm, e1, e2)
}

func newShape(beta, fwhm, e1, e2 float64) shape {
	g2 := e1*e1 + e2*e2
	if g2 > 0.5*0.5 { // keep sane: an axis ratio of 1/3 at most
		k := 0.5 / math.Sqrt(g2)
		e1, e2, g2 = e1*k, e2*k, 0.25
	}
	a := fwhm / widthFactor(beta)
	k := a * a / (1 - g2)
	return shape{beta, fwhm, k * (1 + g2 + 2*e1), k * 2 * e2, k * (1 + g2 - 2*e1)}
}

// widthFactor is FWHM/α of a Moffat profile, or FWHM/σ of a Gaussian (β = 0).
func widthFactor(beta float64) float64 {
	if beta == 0 {
		return 2 * math.Sqrt(2*math.Ln2)
	}
	return 2 * math.Sqrt(math.Pow(2, 1/beta)-1)
}

// inv returns C⁻¹ as xx, xy, yy and √det C.
func (s shape) inv() (ixx, ixy, iyy, root float64) {
	det := s.cxx*s.cyy - s.cxy*s.cxy
	return s.cyy / det, -s.cxy / det, s.cxx / det, math.Sqrt(det)
}

// peak is the profile's central value before pixel integration, per px².
func (s shape) peak() float64 {
	_, _, _, root := s.inv()
	if s.beta == 0 {
		return 1 / (2 * math.Pi * root)
	}
	return (s.beta - 1) / (math.Pi * root)
}

// MajorMinor returns the FWHM along both axes and the angle of the major one
// [px, px, deg from +x towards +y].
func (s shape) majorMinor() (major, minor, angle float64) {
	mean, diff := (s.cxx+s.cyy)/2, math.Hypot((s.cxx-s.cyy)/2, s.cxy)
	k := widthFactor(s.beta)
	return k * math.Sqrt(mean+diff), k * math.Sqrt(mean-diff), 0.5 * math.Atan2(2*s.cxy, s.cxx-s.cyy) / deg
}

// transformed returns the shape seen through a linear map of the pixel grid.
func (s shape) transformed(j [2][2]float64) shape {
	t := s
	t.cxx, t.cxy, t.cyy = congruence(j, s.cxx, s.cxy, s.cyy)
	d := math.Abs(j[0][0]*j[1][1] - j[0][1]*j[1][0])
	t.fwhm *= math.Sqrt(d)
	return t
}

// congruence returns J C Jᵀ.
func congruence(j [2][2]float64, xx, xy, yy float64) (a, b, c float64) {
	a = j[0][0]*j[0][0]*xx + 2*j[0][0]*j[0][1]*xy + j[0][1]*j[0][1]*yy
	b = j[0][0]*j[1][0]*xx + (j[0][0]*j[1][1]+j[0][1]*j[1][0])*xy + j[0][1]*j[1][1]*yy
	c = j[1][0]*j[1][0]*xx + 2*j[1][0]*j[1][1]*xy + j[1][1]*j[1][1]*yy
	return
}

// powerTable evaluates y^-β for y ≥ 1 by splitting off the binary exponent and
// interpolating in the mantissa; relative error below 2e-6 for β ≤ 6.
type powerTable struct {
	beta  float64
	man   [powerBins + 2]float64
	scale [130]float64
}

const powerBins = 2048

func newPowerTable(beta float64) *powerTable {
	t := &powerTable{beta: beta}
	for i := range t.man {
		t.man[i] = math.Pow(1+float64(i)/powerBins, -beta)
	}
	for i := range t.scale {
		t.scale[i] = math.Pow(2, -beta*float64(i))
	}
	return t
}

func (t *powerTable) at(y float64) float64 {
	b := math.Float64bits(y)
	e := int(b>>52) - 1023
	m := (b >> 41) & (powerBins - 1)
	f := float64(b&(1<<41-1)) * (1.0 / (1 << 41))
	a := t.man[m]
	return t.scale[e] * (a + f*(t.man[m+1]-a))
}

// Nodes and weights of Gauss–Legendre quadrature on [-1/2, 1/2] (Abramowitz &
// Stegun 1964, table 25.4).
var legendre = [5][]struct{ x, w float64 }{
	1: {{0, 1}},
	2: {{-0.28867513459481287, 0.5}, {0.28867513459481287, 0.5}},
	3: {{-0.3872983346207417, 5.0 / 18}, {0, 8.0 / 18}, {0.3872983346207417, 5.0 / 18}},
	4: {{-0.43056815579702629, 0.17392742256872692}, {-0.16999052179242813, 0.32607257743127307},
		{0.16999052179242813, 0.32607257743127307}, {0.43056815579702629, 0.17392742256872692}},
}

// addPoint adds a point source of the given flux [count] at (x,y), out to the
// radius where it falls below limit [count/px], at least 2.5 FWHM. Pixel
// integration is by Gauss–Legendre quadrature: 4×4 or 3×3 points where the
// profile is steep, 2×2 farther out, the midpoint in the far wing.
func (p *plane) addPoint(s shape, table *powerTable, x, y, flux, limit float64) {
	ixx, ixy, iyy, root := s.inv()
	amp := flux * s.peak()
	alpha := math.Sqrt(root)
	// Radius in units of α (or σ) where the profile reaches the limit.
	var rad float64
	ratio := math.Abs(amp) / limit
	if s.beta == 0 {
		rad = math.Sqrt(2 * math.Log(math.Max(1, ratio)))
		rad = math.Max(rad, 5.5)
	} else {
		rad = math.Sqrt(math.Max(0, math.Pow(ratio, 1/s.beta)-1))
		rad = math.Max(rad, 2.5*widthFactor(s.beta))
	}
	const widest = 500
	rad = math.Min(rad, widest/alpha)
	rad2 := rad * rad
	hx, hy := rad*math.Sqrt(s.cxx)+1, rad*math.Sqrt(s.cyy)+1
	j0, j1 := max(0, int(math.Ceil(y-1-hy))), min(p.h-1, int(math.Floor(y-1+hy)))
	i0, i1 := max(0, int(math.Ceil(x-1-hx))), min(p.w-1, int(math.Floor(x-1+hx)))
	if j0 > j1 || i0 > i1 {
		return
	}
	inner := 4
	if alpha > 3 || s.beta == 0 && alpha > 1.5 {
		inner = 3
	}
	near, far := 16.0, 100.0
	if s.beta == 0 {
		near, far = 1e9, 1e9
	}
	for j := j0; j <= j1; j++ {
		dy := float64(j+1) - y
		row := p.pix[j*p.w : (j+1)*p.w]
		for i := i0; i <= i1; i++ {
			dx := float64(i+1) - x
			r2 := ixx*dx*dx + 2*ixy*dx*dy + iyy*dy*dy
			if r2 > rad2 {
				continue
			}
			n := inner
			if r2 > far {
				row[i] += float32(amp * table.at(1+r2))
				continue
			} else if r2 > near {
				n = 2
			}
			sum := 0.0
			for _, b := range legendre[n] {
				v := dy + b.x
				part := 0.0
				for _, a := range legendre[n] {
					u := dx + a.x
					q := ixx*u*u + 2*ixy*u*v + iyy*v*v
					if table != nil {
						part += a.w * table.at(1+q)
					} else {
						part += a.w * math.Exp(-0.5*q)
					}
				}
				sum += b.w * part
			}
			row[i] += float32(amp * sum)
		}
	}
}

// plane is a float32 image under construction.
type plane struct {
	w, h int
	pix  []float32
}

func newPlane(w, h int) *plane { return &plane{w, h, make([]float32, w*h)} }

// component is one Gaussian of a mixture: weight and variance in units of the
// profile's own C (or re²).
type component struct{ w, v float64 }

// mixture writes a PSF as a sum of concentric Gaussians. A Moffat profile is a
// mixture of Gaussians whose precision s follows a gamma distribution of shape
// β-1: covariance C/(2s). The trapezoid rule in ln s converges exponentially.
func mixture(beta float64) []component {
	if beta == 0 {
		return []component{{1, 1}}
	}
	const h = 0.6
	norm := math.Gamma(beta - 1)
	var list []component
	sum := 0.0
	for k := -17; k <= 5; k++ {
		s := math.Exp(h * float64(k))
		w := h * math.Pow(s, beta-1) * math.Exp(-s) / norm
		if w < 1e-14 {
			continue
		}
		list = append(list, component{w, 1 / (2 * s)})
		sum += w
	}
	for i := range list {
		list[i].w /= sum
	}
	return list
}
