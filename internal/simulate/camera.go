package simulate

import "math"

const (
	deg    = math.Pi / 180
	arcsec = deg / 3600
)

// Distortion is a polynomial that is added to the pixel offset (u,v) from the
// reference pixel before the linear terms: u + Σ A[p][q] u^p v^q, and B for v,
// for 2 ≤ p+q ≤ 3, as in the SIP convention (Shupe et al. 2005, ASP Conf. Ser.
// 347, 491).
type Distortion struct {
	A, B [4][4]float64
}

func (d *Distortion) at(u, v float64) (f, g, fu, fv, gu, gv float64) {
	pu := [4]float64{1, u, u * u, u * u * u}
	pv := [4]float64{1, v, v * v, v * v * v}
	for p := 0; p <= 3; p++ {
		for q := 0; p+q <= 3; q++ {
			if p+q < 2 {
				continue
			}
			a, b := d.A[p][q], d.B[p][q]
			t := pu[p] * pv[q]
			f += a * t
			g += b * t
			if p > 0 {
				t = float64(p) * pu[p-1] * pv[q]
				fu += a * t
				gu += b * t
			}
			if q > 0 {
				t = float64(q) * pu[p] * pv[q-1]
				fv += a * t
				gv += b * t
			}
		}
	}
	return
}

// newDistortion returns a barrel-like distortion that reaches about amount px
// in the corners of a width × height frame, with a decentred part of a quarter
// of it.
func newDistortion(width, height int, amount float64) *Distortion {
	r := math.Hypot(float64(width), float64(height)) / 2
	d := &Distortion{}
	k := amount / (r * r * r)
	d.A[3][0], d.A[1][2] = k, k
	d.B[0][3], d.B[2][1] = k, k
	q := 0.25 * amount / (r * r)
	d.A[2][0], d.A[1][1], d.A[0][2] = q, -0.6*q, 0.3*q
	d.B[2][0], d.B[1][1], d.B[0][2] = -0.4*q, 0.7*q, 0.8*q
	return d
}

// Camera maps the sky onto pixels: gnomonic projection about (RA, Dec), which
// falls on the centre of the frame, then scale, rotation and parity, then the
// inverse of the distortion (FITS WCS papers I and II: Greisen & Calabretta
// 2002; Calabretta & Greisen 2002).
type Camera struct {
	Width, Height int
	RA, Dec       float64 // deg, true pointing of the centre
	Scale         float64 // arcsec per px
	Rotation      float64 // deg
	Mirrored      bool    // east to the right when unrotated
	Distortion    *Distortion
}

func (c *Camera) centre() (x, y float64) {
	return (float64(c.Width) + 1) / 2, (float64(c.Height) + 1) / 2
}

// cd returns the matrix from (undistorted) pixel offsets to degrees in the
// tangent plane, east and north.
func (c *Camera) cd() (m [2][2]float64) {
	s := c.Scale / 3600
	sin, cos := math.Sincos(c.Rotation * deg)
	m = [2][2]float64{{-s * cos, s * sin}, {s * sin, s * cos}}
	if c.Mirrored {
		m[0][0], m[1][0] = -m[0][0], -m[1][0]
	}
	return m
}

// PixelToSky returns the position [deg] that falls on a pixel.
func (c *Camera) PixelToSky(x, y float64) (ra, dec float64) {
	cx, cy := c.centre()
	u, v := x-cx, y-cy
	if c.Distortion != nil {
		f, g, _, _, _, _ := c.Distortion.at(u, v)
		u, v = u+f, v+g
	}
	m := c.cd()
	return fromTangent(c.RA, c.Dec, m[0][0]*u+m[0][1]*v, m[1][0]*u+m[1][1]*v)
}

// SkyToPixel returns where a position [deg] falls. Positions 90° away or more
// give NaN.
func (c *Camera) SkyToPixel(ra, dec float64) (x, y float64) {
	xi, eta := toTangent(c.RA, c.Dec, ra, dec)
	m := c.cd()
	det := m[0][0]*m[1][1] - m[0][1]*m[1][0]
	U := (m[1][1]*xi - m[0][1]*eta) / det
	V := (m[0][0]*eta - m[1][0]*xi) / det
	u, v := U, V
	if c.Distortion != nil {
		for range 20 {
			f, g, fu, fv, gu, gv := c.Distortion.at(u, v)
			ru, rv := U-u-f, V-v-g
			d := (1+fu)*(1+gv) - fv*gu
			du, dv := ((1+gv)*ru-fv*rv)/d, ((1+fu)*rv-gu*ru)/d
			u, v = u+du, v+dv
			if math.Abs(du)+math.Abs(dv) < 1e-10 {
				break
			}
		}
	}
	cx, cy := c.centre()
	return u + cx, v + cy
}

// jacobian returns d(x,y)/d(east,north) at a pixel, in px per arcsec, by central
// differences. East and north are those of the place, not of the pointing.
func (c *Camera) jacobian(x, y float64) (j [2][2]float64) {
	ra, dec := c.PixelToSky(x, y)
	const h = 0.5
	for k := range 2 {
		d := [2]float64{}
		d[k] = h
		x1, y1 := c.SkyToPixel(offsetSky(ra, dec, d[0], d[1]))
		x0, y0 := c.SkyToPixel(offsetSky(ra, dec, -d[0], -d[1]))
		j[0][k], j[1][k] = (x1-x0)/(2*h), (y1-y0)/(2*h)
	}
	return j
}

func inverse(m [2][2]float64) [2][2]float64 {
	d := m[0][0]*m[1][1] - m[0][1]*m[1][0]
	return [2][2]float64{{m[1][1] / d, -m[0][1] / d}, {-m[1][0] / d, m[0][0] / d}}
}

// mapJacobian returns d(x,y of b)/d(x,y of a) at the pixel (x,y) of a.
func mapJacobian(a, b *Camera, x, y float64) (j [2][2]float64) {
	at := func(x, y float64) (float64, float64) { return b.SkyToPixel(a.PixelToSky(x, y)) }
	x1, y1 := at(x+0.5, y)
	x0, y0 := at(x-0.5, y)
	j[0][0], j[1][0] = x1-x0, y1-y0
	x1, y1 = at(x, y+0.5)
	x0, y0 = at(x, y-0.5)
	j[0][1], j[1][1] = x1-x0, y1-y0
	return j
}

// toTangent projects (ra, dec) onto the plane that touches the sphere at
// (ra0, dec0); all in degrees, east and north positive.
func toTangent(ra0, dec0, ra, dec float64) (xi, eta float64) {
	s0, c0 := math.Sincos(dec0 * deg)
	s, c := math.Sincos(dec * deg)
	sa, ca := math.Sincos((ra - ra0) * deg)
	d := s*s0 + c*c0*ca
	if d <= 0 {
		return math.NaN(), math.NaN()
	}
	return c * sa / d / deg, (s*c0 - c*s0*ca) / d / deg
}

func fromTangent(ra0, dec0, xi, eta float64) (ra, dec float64) {
	s0, c0 := math.Sincos(dec0 * deg)
	x, y := xi*deg, eta*deg
	den := c0 - y*s0
	ra = ra0 + math.Atan2(x, den)/deg
	dec = math.Atan2(s0+y*c0, math.Hypot(x, den)) / deg
	return math.Mod(ra+720, 360), dec
}

// offsetSky moves a position by arcseconds east and north on the tangent plane.
func offsetSky(ra, dec, east, north float64) (float64, float64) {
	return fromTangent(ra, dec, east/3600, north/3600)
}

// separation is the angle between two positions [deg].
func separation(ra1, dec1, ra2, dec2 float64) float64 {
	s := math.Sin((dec2 - dec1) / 2 * deg)
	t := math.Sin((ra2 - ra1) / 2 * deg)
	h := s*s + math.Cos(dec1*deg)*math.Cos(dec2*deg)*t*t
	return 2 * math.Asin(math.Min(1, math.Sqrt(h))) / deg
}
