package catalog

import (
	"math"
	"math/rand/v2"
	"testing"
)

// Every position within the radius lies in a cell of the cone, at any place.
func TestConeCoversItsCircle(t *testing.T) {
	r := rand.New(rand.NewPCG(6, 6))
	inside, cells := 0, 0
	for range 3000 {
		ra, dec := 360*r.Float64(), math.Asin(2*r.Float64()-1)/radian
		switch r.IntN(4) {
		case 0: // near a pole
			dec = (90 - 0.2*r.Float64()*r.Float64()) * float64(1-2*r.IntN(2))
		case 1: // near the seam
			ra = math.Mod(360+0.01*r.NormFloat64(), 360)
		}
		radius := math.Exp(10 * r.Float64()) // 1" to 6 degrees
		ranges := cone(nil, ra, dec, radius)
		centre := newPlane(ra, dec)
		for range 20 {
			d, a := radius*math.Sqrt(r.Float64()), 2*math.Pi*r.Float64()
			d = math.Tan(d*arcsec) / arcsec
			p := centre.direction(d*math.Cos(a), d*math.Sin(a))
			if separation(p, centre.at) > radius {
				continue
			}
			inside++
			pra, pdec := p.position()
			cell, hit := cellOf(pra, pdec), false
			for _, c := range ranges {
				hit = hit || cell >= c.from && cell <= c.to
			}
			if !hit {
				t.Fatalf("(%g,%g) lies within %g\" of (%g,%g) but not in its cells", pra, pdec, radius, ra, dec)
			}
		}
		if radius < 20 && math.Abs(dec) < 89.8 {
			n := int64(0)
			for _, c := range ranges {
				n += c.to - c.from + 1
			}
			if n > 8 {
				t.Fatalf("%d cells for %g\" at (%g,%g)", n, radius, ra, dec)
			}
			cells++
		}
	}
	if inside < 50000 || cells < 300 {
		t.Errorf("only %d positions and %d small cones tested", inside, cells)
	}
}

func TestCellsAreDistinct(t *testing.T) {
	for z := 0; z < zones; z += 37 {
		if n := cellsIn(z); n < 1 || n > 360*60 || n >= cellStride {
			t.Fatalf("zone %d has %d cells", z, n)
		}
	}
	for _, p := range [][2]float64{{0, 90}, {0, -90}, {360, 0}, {-0.0001, 0}, {359.99999999, 90}} {
		c := cellOf(p[0], p[1])
		if z := c / cellStride; z < 0 || z >= zones || c%cellStride >= int64(cellsIn(int(z))) {
			t.Errorf("%v: cell %d", p, c)
		}
	}
}

func TestPlaneClosesAndSeparationAgrees(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 7))
	for range 2000 {
		ra, dec := 360*r.Float64(), math.Asin(2*r.Float64()-1)/radian
		p := newPlane(ra, dec)
		xi, eta := 2000*(r.Float64()-0.5), 2000*(r.Float64()-0.5)
		a, d := p.direction(xi, eta).position()
		x, y := p.offset(unit(a, d))
		if math.Hypot(x-xi, y-eta) > 1e-8 {
			t.Fatalf("(%g,%g) came back as (%g,%g)", xi, eta, x, y)
		}
		if s := separation(unit(a, d), p.at); math.Abs(s-math.Atan(math.Hypot(xi, eta)*arcsec)/arcsec) > 1e-8 {
			t.Fatalf("separation %g", s)
		}
	}
}
