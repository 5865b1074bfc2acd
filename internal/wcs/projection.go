package wcs

import "math"

// maxParameter is the highest m of PVi_m that a projection takes.
const maxParameter = 29

// parameters are a projection's own numbers: the PVi_m of the latitude axis, and
// what prepare derives from them.
type parameters struct {
	pv [maxParameter + 1]float64
	// degree, limit and limitRadius belong to ZPN.
	degree             int
	limit, limitRadius float64
}

// A projection maps between the plane and the sphere in native coordinates
// (Calabretta & Greisen 2002, A&A 395, 1077, "paper II").
//
// The plane's (u,v) are paper II's (x,y) in radians. On the sphere a place is
// the unit vector
//
//	a = cos θ cos φ, b = cos θ sin φ, n = sin θ
//
// so that zenithal formulas need no angle at all, and lose nothing at a pole.
// Both functions report false where the formula has no answer. A further
// projection is one more entry of the table below.
type projection struct {
	code     string
	toSphere func(p *parameters, u, v float64) (a, b, n float64, ok bool)
	toPlane  func(p *parameters, a, b, n float64) (u, v float64, ok bool)
	// theta is the native latitude [deg] of the reference point: 90 for a
	// zenithal projection, 0 for the others.
	theta float64
	// It takes PVi_m of the latitude axis for m from first to last; prepare,
	// which may be nil, judges them and derives the rest of parameters.
	first, last int
	prepare     func(p *parameters) error
}

var projections = []projection{
	{code: "TAN", toSphere: tanToSphere, toPlane: tanToPlane, theta: 90, last: -1},
	{code: "SIN", toSphere: sinToSphere, toPlane: sinToPlane, theta: 90, first: 1, last: 2},
	{code: "ARC", toSphere: arcToSphere, toPlane: arcToPlane, theta: 90, last: -1},
	{code: "STG", toSphere: stgToSphere, toPlane: stgToPlane, theta: 90, last: -1},
	{code: "ZEA", toSphere: zeaToSphere, toPlane: zeaToPlane, theta: 90, last: -1},
	{code: "ZPN", toSphere: zpnToSphere, toPlane: zpnToPlane, theta: 90, last: maxParameter, prepare: prepareZPN},
	{code: "CAR", toSphere: carToSphere, toPlane: carToPlane, last: -1},
	{code: "CEA", toSphere: ceaToSphere, toPlane: ceaToPlane, first: 1, last: 1, prepare: prepareCEA},
	{code: "MER", toSphere: merToSphere, toPlane: merToPlane, last: -1},
	{code: "SFL", toSphere: sflToSphere, toPlane: sflToPlane, last: -1},
	{code: "PAR", toSphere: parToSphere, toPlane: parToPlane, last: -1},
	{code: "AIT", toSphere: aitToSphere, toPlane: aitToPlane, last: -1},
}

// projectionByCode returns nil for a code that is not in the table.
func projectionByCode(code string) *projection {
	for i := range projections {
		if projections[i].code == code {
			return &projections[i]
		}
	}
	return nil
}

// tanToSphere is the gnomonic projection, R = cot θ (paper II, section 5.1.3).
func tanToSphere(_ *parameters, u, v float64) (a, b, n float64, ok bool) {
	n = 1 / math.Sqrt(1+u*u+v*v)
	return -v * n, u * n, n, true
}

func tanToPlane(_ *parameters, a, b, n float64) (u, v float64, ok bool) {
	if n <= 0 {
		return 0, 0, false
	}
	return b / n, -a / n, true
}

// sinToSphere is the slant orthographic projection with ξ = PVi_1, η = PVi_2
// (paper II, section 5.1.5), in terms of s = 1 - sin θ:
//
//	u = b + ξ s, v = -a + η s
func sinToSphere(p *parameters, u, v float64) (a, b, n float64, ok bool) {
	xi, eta := p.pv[1], p.pv[2]
	// a² + b² + (1-s)² = 1 is A s² - 2 B s + C = 0; the smaller root is the
	// near side, written so that nothing cancels.
	qa := 1 + xi*xi + eta*eta
	qb := 1 + xi*u + eta*v
	qc := u*u + v*v
	d := qb*qb - qa*qc
	if d < 0 {
		if d < -1e-13*(1+qb*qb) {
			return 0, 0, 0, false
		}
		d = 0 // on the limb but for rounding
	}
	root := qb + math.Sqrt(d)
	if root <= 0 {
		return 0, 0, 0, false
	}
	s := qc / root
	if s > 2 {
		return 0, 0, 0, false
	}
	return eta*s - v, u - xi*s, 1 - s, true
}

func sinToPlane(p *parameters, a, b, n float64) (u, v float64, ok bool) {
	xi, eta := p.pv[1], p.pv[2]
	s := 1 - n
	if n > 0.5 { // 1 - n cancels near the pole
		s = (a*a + b*b) / (1 + n)
	}
	u = b + xi*s
	v = eta*s - a
	// Beyond the limb the same (u,v) belongs to a nearer place.
	if n < eta*a-xi*b-1e-12 {
		return 0, 0, false
	}
	return u, v, true
}

// arcToSphere is the zenithal equidistant projection, R = 90° - θ (paper II,
// section 5.1.6).
func arcToSphere(_ *parameters, u, v float64) (a, b, n float64, ok bool) {
	r := math.Hypot(u, v)
	if r > math.Pi*(1+1e-13) {
		return 0, 0, 0, false
	}
	s, c := math.Sincos(r)
	f := 1.0
	if r > 0 {
		f = s / r
	}
	return -v * f, u * f, c, true
}

func arcToPlane(_ *parameters, a, b, n float64) (u, v float64, ok bool) {
	h := math.Hypot(a, b)
	if h == 0 {
		// The antipole is a whole circle: any point of it will do.
		return 0, math.Atan2(h, n), true
	}
	f := math.Atan2(h, n) / h
	return b * f, -a * f, true
}

// stgToSphere is the stereographic projection, R = 2 tan((90° - θ)/2) (paper
// II, section 5.1.4).
func stgToSphere(_ *parameters, u, v float64) (a, b, n float64, ok bool) {
	q := (u*u + v*v) / 4
	f := 1 / (1 + q)
	return -v * f, u * f, (1 - q) * f, true
}

func stgToPlane(_ *parameters, a, b, n float64) (u, v float64, ok bool) {
	if 1+n <= 1e-15 {
		return 0, 0, false
	}
	f := 2 / (1 + n)
	if n < -0.5 { // 1 + n cancels near the antipole
		h := a*a + b*b
		if h == 0 {
			return 0, 0, false
		}
		f = 2 * (1 - n) / h
	}
	return b * f, -a * f, true
}

// zeaToSphere is the zenithal equal-area projection, R = 2 sin((90° - θ)/2)
// (paper II, section 5.1.7).
func zeaToSphere(_ *parameters, u, v float64) (a, b, n float64, ok bool) {
	q := (u*u + v*v) / 4
	if q > 1 {
		if q > 1+1e-13 {
			return 0, 0, 0, false
		}
		q = 1
	}
	f := math.Sqrt(1 - q)
	return -v * f, u * f, 1 - 2*q, true
}

func zeaToPlane(_ *parameters, a, b, n float64) (u, v float64, ok bool) {
	f2 := 2 / (1 + n)
	if n < -0.5 {
		h := a*a + b*b
		if h == 0 {
			return 0, 2, true // the antipole is a whole circle
		}
		f2 = 2 * (1 - n) / h
	}
	f := math.Sqrt(f2)
	return b * f, -a * f, true
}
