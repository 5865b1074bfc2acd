package wcs

import "math"

// maxOrder is the highest order of a SIP polynomial (Shupe et al. 2005).
const maxOrder = 9

// maxTPVOrder is the highest degree of a TPV polynomial.
const maxTPVOrder = 7

// polynomial is Σ c[p][q] x^p y^q over p + q ≤ order.
type polynomial struct {
	order int
	c     [maxOrder + 1][maxOrder + 1]float64
}

// at returns the value at (x,y), by Horner's rule in both.
func (f *polynomial) at(x, y float64) float64 {
	sum := 0.0
	for p := f.order; p >= 0; p-- {
		row := f.c[p][:f.order-p+1]
		t := 0.0
		for q := len(row) - 1; q >= 0; q-- {
			t = t*y + row[q]
		}
		sum = sum*x + t
	}
	return sum
}

// gradient returns the value and both derivatives at (x,y).
func (f *polynomial) gradient(x, y float64) (value, dx, dy float64) {
	for p := f.order; p >= 0; p-- {
		row := f.c[p][:f.order-p+1]
		t, dt := 0.0, 0.0
		for q := len(row) - 1; q >= 0; q-- {
			dt = dt*y + t
			t = t*y + row[q]
		}
		dx = dx*x + value
		value = value*x + t
		dy = dy*x + dt
	}
	return value, dx, dy
}

// inX collapses the polynomial along the row y: Σ k[p] x^p.
func (f *polynomial) inX(k *[maxOrder + 1]float64, y float64) {
	for p := 0; p <= f.order; p++ {
		row := f.c[p][:f.order-p+1]
		t := 0.0
		for q := len(row) - 1; q >= 0; q-- {
			t = t*y + row[q]
		}
		k[p] = t
	}
}

func horner(k []float64, x float64) float64 {
	s := 0.0
	for p := len(k) - 1; p >= 0; p-- {
		s = s*x + k[p]
	}
	return s
}

// sip is the distortion of the SIP convention (Shupe et al. 2005, ASP Conf.
// Ser. 347, 491): pixel offsets u, v from CRPIX become u + A(u,v), v + B(u,v)
// before the CD matrix. The inverse polynomials AP, BP only start the
// iteration, and may be nil.
type sip struct {
	a, b   polynomial
	ap, bp *polynomial
}

// tpv is the distortion of the TPV convention (FITS registry; the older
// spelling has CTYPE TAN): intermediate coordinates x, y [deg] become a
// polynomial in x, y and r = √(x²+y²) before the gnomonic projection. Each axis
// has its own coordinate first, so the second one's polynomial is stored with
// x and y already exchanged.
type tpv struct {
	lon, lat             polynomial
	lonRadial, latRadial [4]float64 // of r, r³, r⁵, r⁷
}

// at returns the distorted coordinates and their four derivatives.
func (t *tpv) at(x, y float64) (lon, lat, lonX, lonY, latX, latY float64) {
	lon, lonX, lonY = t.lon.gradient(x, y)
	lat, latX, latY = t.lat.gradient(x, y)
	r := math.Hypot(x, y)
	if r == 0 {
		return
	}
	r2 := r * r
	k, m := &t.lonRadial, &t.latRadial
	lon += r * (k[0] + r2*(k[1]+r2*(k[2]+r2*k[3])))
	lat += r * (m[0] + r2*(m[1]+r2*(m[2]+r2*m[3])))
	dk := (k[0] + r2*(3*k[1]+r2*(5*k[2]+r2*7*k[3]))) / r
	dm := (m[0] + r2*(3*m[1]+r2*(5*m[2]+r2*7*m[3]))) / r
	lonX += dk * x
	lonY += dk * y
	latX += dm * x
	latY += dm * y
	return
}

const newtonSteps = 30

// maxStretch is the largest derivative of a distortion at a pixel that is
// found: beyond it the pixel's own rounding shows in its place, and no camera
// does that.
const maxStretch = 1e4

// invert finds (u,v) with u + A(u,v) = x and v + B(u,v) = y [px] by Newton's
// method, to 1e-10 px. It reports false where that fails, or where the answer
// lies beyond a fold of the polynomial and so belongs to another place, or where
// the polynomial is absurdly steep.
func (s *sip) invert(x, y float64) (u, v float64, ok bool) {
	if s.ap != nil && s.bp != nil {
		if u, v, ok = s.newton(x, y, x+s.ap.at(x, y), y+s.bp.at(x, y)); ok {
			return u, v, true
		}
	}
	return s.newton(x, y, x, y)
}

// newton is invert from the start (u,v).
func (s *sip) newton(x, y, u, v float64) (float64, float64, bool) {
	for range newtonSteps {
		fa, ax, ay := s.a.gradient(u, v)
		fb, bx, by := s.b.gradient(u, v)
		ax++
		by++
		det := ax*by - ay*bx
		ru, rv := u+fa-x, v+fb-y
		du := (by*ru - ay*rv) / det
		dv := (ax*rv - bx*ru) / det
		u -= du
		v -= dv
		step := math.Abs(du) + math.Abs(dv)
		if !(step < math.MaxFloat64) { // NaN or infinite
			return 0, 0, false
		}
		if step < 1e-10*(1+1e-4*(math.Abs(u)+math.Abs(v))) {
			return u, v, det > 0 && math.Abs(ax)+math.Abs(ay)+math.Abs(bx)+math.Abs(by) < maxStretch
		}
	}
	return 0, 0, false
}

// invert finds (x,y) [deg] whose distorted place is (lon,lat), like sip.invert;
// tolerance is in degrees, side the sign of the determinant at the reference point.
func (t *tpv) invert(lon, lat, tolerance, side float64) (x, y float64, ok bool) {
	x, y = lon, lat
	for range newtonSteps {
		fl, lx, ly, mx, my := 0.0, 0.0, 0.0, 0.0, 0.0
		var fm float64
		fl, fm, lx, ly, mx, my = t.at(x, y)
		det := lx*my - ly*mx
		rl, rm := fl-lon, fm-lat
		dx := (my*rl - ly*rm) / det
		dy := (lx*rm - mx*rl) / det
		x -= dx
		y -= dy
		step := math.Abs(dx) + math.Abs(dy)
		if !(step < math.MaxFloat64) {
			return 0, 0, false
		}
		if step < tolerance+1e-14*(math.Abs(x)+math.Abs(y)) {
			return x, y, det*side > 0 && math.Abs(lx)+math.Abs(ly)+math.Abs(mx)+math.Abs(my) < maxStretch
		}
	}
	return 0, 0, false
}
