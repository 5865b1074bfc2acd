package wcs

import (
	"fmt"
	"math"
)

// prepareZPN finds how far from the pole the polynomial of ZPN grows: there its
// inverse ends.
func prepareZPN(p *parameters) error {
	p.degree = 0
	for m, v := range p.pv {
		if v != 0 {
			p.degree = m
		}
	}
	if !(p.pv[1] > 0) {
		return fmt.Errorf("wcs: PVi_1 = %g of the latitude axis: the polynomial of ZPN must grow at the reference point; want a positive number",
			p.pv[1])
	}
	p.limit = math.Pi
	const steps = 7200
	for i := 1; i <= steps; i++ {
		low, high := float64(i-1)*math.Pi/steps, float64(i)*math.Pi/steps
		if _, slope := p.zpnRadius(high); slope > 0 {
			continue
		}
		for range 60 {
			middle := (low + high) / 2
			if _, slope := p.zpnRadius(middle); slope > 0 {
				low = middle
			} else {
				high = middle
			}
		}
		p.limit = low
		break
	}
	p.limitRadius, _ = p.zpnRadius(p.limit)
	if math.IsNaN(p.limitRadius) || math.IsInf(p.limitRadius, 0) {
		return fmt.Errorf("wcs: the PVi_m of the latitude axis make the polynomial of ZPN overflow")
	}
	return nil
}

// zpnRadius returns R = Σ PVi_m ζ^m and its derivative at the distance ζ [rad]
// from the native pole.
func (p *parameters) zpnRadius(zeta float64) (radius, slope float64) {
	for m := p.degree; m >= 0; m-- {
		slope = slope*zeta + radius
		radius = radius*zeta + p.pv[m]
	}
	return radius, slope
}

// zpnToSphere is the zenithal polynomial projection (paper II, section 5.1.8).
// Within the limit the polynomial grows, so that Newton's steps, with a
// bisection wherever one leaves the bracket, find the only answer.
func zpnToSphere(p *parameters, u, v float64) (a, b, n float64, ok bool) {
	r := math.Hypot(u, v)
	if !(r <= p.limitRadius*(1+1e-13)) || !(r >= p.pv[0]-1e-13) {
		return 0, 0, 0, false
	}
	low, high := 0.0, p.limit
	zeta := math.Min((r-p.pv[0])/p.pv[1], p.limit)
	for range 200 {
		value, slope := p.zpnRadius(zeta)
		switch {
		case value < r:
			low = zeta
		case value > r:
			high = zeta
		}
		next := zeta - (value-r)/slope
		if !(next >= low && next <= high) {
			next = (low + high) / 2
		}
		step := math.Abs(next - zeta)
		zeta = next
		if step <= 4e-16*zeta {
			break
		}
	}
	s, c := math.Sincos(zeta)
	if r == 0 {
		return 0, 0, c, true
	}
	return -v / r * s, u / r * s, c, true
}

func zpnToPlane(p *parameters, a, b, n float64) (u, v float64, ok bool) {
	h := math.Hypot(a, b)
	zeta := math.Atan2(h, n)
	if zeta > p.limit*(1+1e-13) {
		return 0, 0, false
	}
	r, _ := p.zpnRadius(zeta)
	if h == 0 { // a pole that is a circle: any point of it will do
		return 0, r, true
	}
	return b / h * r, -a / h * r, true
}
