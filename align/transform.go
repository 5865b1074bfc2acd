package align

import (
	"fmt"
	"math"
)

// MaxOrder is the highest total degree of a Transform.
const MaxOrder = 5

// Transform maps positions on the new frame to positions on the reference, both
// FITS pixels: each coordinate is a sum of products of Legendre polynomials of
// total degree up to Order in u = (x-X0)/HalfX and v = (y-Y0)/HalfY. It is
// read-only: safe for concurrent use.
type Transform struct {
	Order        int
	X0, Y0       float64 // px, centre of the domain of the fit
	HalfX, HalfY float64 // px, half-sides of that domain
	// CX and CY hold the coefficients [px]: for d = 0…Order, for j = 0…d, the
	// one of P_(d-j)(u)·P_j(v).
	CX, CY []float64
}

// terms returns the number of coefficients of one coordinate.
func terms(order int) int { return (order + 1) * (order + 2) / 2 }

// check reports what makes a transform, read from a file, unusable.
func (t *Transform) check() error {
	if t.Order < 1 || t.Order > MaxOrder || len(t.CX) != terms(t.Order) || len(t.CY) != terms(t.Order) {
		return fmt.Errorf("transform of order %d with %d and %d coefficients: want order 1 to %d with (n+1)(n+2)/2 each", t.Order, len(t.CX), len(t.CY), MaxOrder)
	}
	for _, s := range [][]float64{t.CX, t.CY, {t.X0, t.Y0, 1 / t.HalfX, 1 / t.HalfY}} {
		for _, c := range s {
			if math.IsNaN(c) || math.IsInf(c, 0) {
				return fmt.Errorf("transform with a coefficient that is not finite")
			}
		}
	}
	return nil
}

// legendre fills p[0…order] with Legendre polynomials at u by Bonnet's
// recursion and d with their derivatives.
func legendre(u float64, order int, p, d *[MaxOrder + 1]float64) {
	p[0], d[0] = 1, 0
	if order == 0 {
		return
	}
	p[1], d[1] = u, 1
	for n := 2; n <= order; n++ {
		p[n] = (float64(2*n-1)*u*p[n-1] - float64(n-1)*p[n-2]) / float64(n)
		d[n] = float64(n)*p[n-1] + u*d[n-1]
	}
}

// basis fills b with the terms at (x,y).
func (t *Transform) basis(x, y float64, b []float64) {
	var p, q, d [MaxOrder + 1]float64
	legendre((x-t.X0)/t.HalfX, t.Order, &p, &d)
	legendre((y-t.Y0)/t.HalfY, t.Order, &q, &d)
	k := 0
	for n := 0; n <= t.Order; n++ {
		for j := 0; j <= n; j++ {
			b[k] = p[n-j] * q[j]
			k++
		}
	}
}

// Apply returns the position on the reference.
func (t *Transform) Apply(x, y float64) (xr, yr float64) {
	var p, q, d [MaxOrder + 1]float64
	legendre((x-t.X0)/t.HalfX, t.Order, &p, &d)
	legendre((y-t.Y0)/t.HalfY, t.Order, &q, &d)
	k := 0
	for n := 0; n <= t.Order; n++ {
		for j := 0; j <= n; j++ {
			b := p[n-j] * q[j]
			xr += t.CX[k] * b
			yr += t.CY[k] * b
			k++
		}
	}
	return xr, yr
}

// Jacobian returns the derivatives of the position on the reference:
// xx = ∂xr/∂x, xy = ∂xr/∂y, yx = ∂yr/∂x, yy = ∂yr/∂y.
func (t *Transform) Jacobian(x, y float64) (xx, xy, yx, yy float64) {
	var p, q, dp, dq [MaxOrder + 1]float64
	legendre((x-t.X0)/t.HalfX, t.Order, &p, &dp)
	legendre((y-t.Y0)/t.HalfY, t.Order, &q, &dq)
	k := 0
	for n := 0; n <= t.Order; n++ {
		for j := 0; j <= n; j++ {
			bx, by := dp[n-j]*q[j]/t.HalfX, p[n-j]*dq[j]/t.HalfY
			xx += t.CX[k] * bx
			xy += t.CX[k] * by
			yx += t.CY[k] * bx
			yy += t.CY[k] * by
			k++
		}
	}
	return
}

// Area returns the area on the reference of a new pixel at (x,y) [reference
// px²], positive also for mirrored frames.
func (t *Transform) Area(x, y float64) float64 {
	xx, xy, yx, yy := t.Jacobian(x, y)
	return math.Abs(xx*yy - xy*yx)
}

// Inverse returns the position on the new frame, by Newton's method to 1e-9 px;
// ok is false where it does not converge, which happens only far outside the
// domain.
func (t *Transform) Inverse(xr, yr float64) (x, y float64, ok bool) {
	a := t.linear()
	inv, ok := a.inverse()
	if !ok {
		return math.NaN(), math.NaN(), false
	}
	p := inv.apply(point{xr, yr})
	for range 30 {
		gx, gy := t.Apply(p.x, p.y)
		xx, xy, yx, yy := t.Jacobian(p.x, p.y)
		det := xx*yy - xy*yx
		if det*a.det() <= 0 {
			return math.NaN(), math.NaN(), false
		}
		ex, ey := xr-gx, yr-gy
		dx, dy := (yy*ex-xy*ey)/det, (xx*ey-yx*ex)/det
		p.x, p.y = p.x+dx, p.y+dy
		if math.Abs(dx)+math.Abs(dy) < 1e-9 {
			return p.x, p.y, true
		}
		if math.IsNaN(dx+dy) || math.Abs(dx)+math.Abs(dy) > 1e7 {
			break
		}
	}
	return math.NaN(), math.NaN(), false
}

// linear is the affine map that touches the transform at its centre.
func (t *Transform) linear() affine {
	x, y := t.Apply(t.X0, t.Y0)
	xx, xy, yx, yy := t.Jacobian(t.X0, t.Y0)
	return affine{x0: x - xx*t.X0 - xy*t.Y0, xx: xx, xy: xy, y0: y - yx*t.X0 - yy*t.Y0, yx: yx, yy: yy}
}

// fromAffine returns the transform of order 1 equal to a map.
func fromAffine(a affine, width, height float64) *Transform {
	c := point{(width + 1) / 2, (height + 1) / 2}
	q := a.apply(c)
	return &Transform{Order: 1, X0: c.x, Y0: c.y, HalfX: width / 2, HalfY: height / 2,
		CX: []float64{q.x, a.xx * width / 2, a.xy * height / 2},
		CY: []float64{q.y, a.yx * width / 2, a.yy * height / 2}}
}
