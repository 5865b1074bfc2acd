package wcs

import (
	"fmt"
	"math"
)

// The projections of this file have their reference point on the native
// equator. rim is how far beyond the edge of the map rounding may take a point.
const rim = 1e-13

// onSphere returns the unit vector of native longitude and latitude, the latter
// by its sine and cosine.
func onSphere(phi, sinTheta, cosTheta float64) (a, b, n float64, ok bool) {
	if !(math.Abs(phi) <= math.Pi+rim) {
		return 0, 0, 0, false
	}
	s, c := math.Sincos(phi)
	return cosTheta * c, cosTheta * s, sinTheta, true
}

// carToSphere is the plate carrée, x = φ, y = θ (paper II, section 5.2.3).
func carToSphere(_ *parameters, u, v float64) (a, b, n float64, ok bool) {
	if !(math.Abs(v) <= math.Pi/2+rim) {
		return 0, 0, 0, false
	}
	s, c := math.Sincos(v)
	return onSphere(u, s, c)
}

func carToPlane(_ *parameters, a, b, n float64) (u, v float64, ok bool) {
	return math.Atan2(b, a), math.Atan2(n, math.Hypot(a, b)), true
}

// prepareCEA judges λ = PVi_1, which is 1 when it is not given.
func prepareCEA(p *parameters) error {
	if p.pv[1] == 0 {
		p.pv[1] = 1
	}
	if !(p.pv[1] > 0 && p.pv[1] <= 1) {
		return fmt.Errorf("wcs: PVi_1 = %g of the latitude axis: CEA wants a number above 0, at most 1", p.pv[1])
	}
	return nil
}

// ceaToSphere is the cylindrical equal-area projection, x = φ, y = sin θ / λ
// (paper II, section 5.2.2).
func ceaToSphere(p *parameters, u, v float64) (a, b, n float64, ok bool) {
	s := v * p.pv[1]
	if !(math.Abs(s) <= 1+rim) {
		return 0, 0, 0, false
	}
	return onSphere(u, s, math.Sqrt(math.Max(0, (1-s)*(1+s))))
}

func ceaToPlane(p *parameters, a, b, n float64) (u, v float64, ok bool) {
	return math.Atan2(b, a), n / p.pv[1], true
}

// merToSphere is Mercator's projection, x = φ, y = ln tan(45° + θ/2) (paper II,
// section 5.2.4).
func merToSphere(_ *parameters, u, v float64) (a, b, n float64, ok bool) {
	return onSphere(u, math.Tanh(v), 1/math.Cosh(v))
}

func merToPlane(_ *parameters, a, b, n float64) (u, v float64, ok bool) {
	h := math.Hypot(a, b)
	if h == 0 {
		return 0, 0, false
	}
	return math.Atan2(b, a), math.Asinh(n / h), true
}

// sflToSphere is the projection of Sanson and Flamsteed, x = φ cos θ, y = θ
// (paper II, section 5.3.1).
func sflToSphere(_ *parameters, u, v float64) (a, b, n float64, ok bool) {
	if !(math.Abs(v) <= math.Pi/2+rim) {
		return 0, 0, 0, false
	}
	s, c := math.Sincos(v)
	return narrowing(u, c, s, c)
}

// narrowing returns the unit vector at a latitude where the map is narrower
// than the equator by a factor.
func narrowing(u, factor, sinTheta, cosTheta float64) (a, b, n float64, ok bool) {
	if factor <= rim { // a pole
		return 0, 0, sinTheta, math.Abs(u) <= rim
	}
	if !(math.Abs(u) <= math.Pi*factor+rim) {
		return 0, 0, 0, false
	}
	s, c := math.Sincos(u / factor)
	return cosTheta * c, cosTheta * s, sinTheta, true
}

func sflToPlane(_ *parameters, a, b, n float64) (u, v float64, ok bool) {
	h := math.Hypot(a, b)
	return math.Atan2(b, a) * h, math.Atan2(n, h), true
}

// parToSphere is the parabolic projection, x = φ (2 cos(2θ/3) - 1),
// y = 180° sin(θ/3) (paper II, section 5.3.2).
func parToSphere(_ *parameters, u, v float64) (a, b, n float64, ok bool) {
	q := v / math.Pi
	if !(math.Abs(q) <= 0.5+rim) {
		return 0, 0, 0, false
	}
	s, c := math.Sincos(3 * math.Asin(q))
	return narrowing(u, 1-4*q*q, s, math.Abs(c))
}

func parToPlane(_ *parameters, a, b, n float64) (u, v float64, ok bool) {
	q := math.Sin(math.Atan2(n, math.Hypot(a, b)) / 3)
	return math.Atan2(b, a) * (1 - 4*q*q), math.Pi * q, true
}

// aitToSphere is the projection of Hammer and Aitoff (paper II, section 5.3.4).
// With Z² = 1 - (x/4)² - (y/2)² the half angle has
//
//	cos θ cos(φ/2) = 2 Z² - 1, cos θ sin(φ/2) = Z x/2, sin θ = Z y
func aitToSphere(_ *parameters, u, v float64) (a, b, n float64, ok bool) {
	z2 := 1 - u*u/16 - v*v/4
	if !(z2 >= 0.5-rim) {
		return 0, 0, 0, false
	}
	z := math.Sqrt(z2)
	c, s := 2*z2-1, z*u/2
	cosTheta := math.Hypot(c, s)
	if cosTheta == 0 {
		return 0, 0, math.Copysign(1, v), true
	}
	return (c*c - s*s) / cosTheta, 2 * s * c / cosTheta, z * v, true
}

func aitToPlane(_ *parameters, a, b, n float64) (u, v float64, ok bool) {
	cosTheta := math.Hypot(a, b)
	s, c := math.Sincos(math.Atan2(b, a) / 2)
	g := math.Sqrt(2 / (1 + cosTheta*c))
	return 2 * g * cosTheta * s, g * n, true
}
