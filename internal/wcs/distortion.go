package wcs

import "fmt"

// AsTPV returns the same WCS with its distortion in the TPV convention instead
// of SIP. The two are the same polynomials, once in pixels and once in
// intermediate coordinates, so that places agree to rounding. A WCS without SIP
// is returned as it is. The error says why TPV cannot hold it: a projection
// other than TAN, an order above 7, terms so large that they overflow.
func (w *WCS) AsTPV() (*WCS, error) {
	s := w.distortion
	if s == nil {
		return w, nil
	}
	if w.proj.code != "TAN" || w.polynomial != nil {
		return nil, fmt.Errorf("wcs: SIP on the projection %s cannot be written as TPV, which is gnomonic", w.Projection())
	}
	if order := w.SIPOrder(); order > maxTPVOrder {
		return nil, fmt.Errorf("wcs: SIP of order %d cannot be written as TPV, which ends at %d", order, maxTPVOrder)
	}
	// u + A(u,v) and v + B(u,v) as polynomials in x, y [deg], with u and v by the
	// inverse of CD; then CD on both.
	a, b := s.a.substitute(w.inverse), s.b.substitute(w.inverse)
	t := &tpv{}
	t.lon.order, t.lat.order = max(a.order, b.order), max(a.order, b.order)
	for p := 0; p <= t.lon.order; p++ {
		for q := 0; p+q <= t.lon.order; q++ {
			t.lon.c[p][q] = w.cd[0][0]*a.c[p][q] + w.cd[0][1]*b.c[p][q]
			t.lat.c[p][q] = w.cd[1][0]*a.c[p][q] + w.cd[1][1]*b.c[p][q]
			if !finite(t.lon.c[p][q]) || !finite(t.lat.c[p][q]) {
				return nil, fmt.Errorf("wcs: the SIP terms overflow when they are written as TPV")
			}
		}
	}
	c := *w
	c.distortion, c.polynomial = nil, t.identity()
	if err := c.finish(); err != nil {
		return nil, err
	}
	return &c, nil
}

// substitute returns the polynomial in (x,y) that f is when its variables are
// m (x,y).
func (f *polynomial) substitute(m [2][2]float64) *polynomial {
	// The powers of each variable as homogeneous polynomials, by the power of y.
	var u, v [maxOrder + 1][maxOrder + 1]float64
	u[0][0], v[0][0] = 1, 1
	for k := 1; k <= f.order; k++ {
		for q := range k {
			u[k][q] += m[0][0] * u[k-1][q]
			u[k][q+1] += m[0][1] * u[k-1][q]
			v[k][q] += m[1][0] * v[k-1][q]
			v[k][q+1] += m[1][1] * v[k-1][q]
		}
	}
	g := &polynomial{order: f.order}
	for p := 0; p <= f.order; p++ {
		for q := 0; p+q <= f.order; q++ {
			for i := 0; i <= p; i++ {
				for j := 0; j <= q; j++ {
					g.c[p+q-i-j][i+j] += f.c[p][q] * u[p][i] * v[q][j]
				}
			}
		}
	}
	return g
}
