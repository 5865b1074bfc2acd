package wcs

import (
	"math"

	"nightsift/internal/astro"
)

// fk4 turns positions of the system FK4 into ICRS ones: the elliptic terms of
// aberration, which FK4 positions hold, go out, then a matrix applies.
type fk4 struct {
	eterms     [3]float64 // along the axes of the header's equinox; 0 for FK4-NO-E
	m, inverse matrix     // m is a rotation but for 1e-6
}

// The elliptic terms of aberration at B1950 and their change in a tropical
// century, and the matrix from FK4 to FK5: places, and the change of those in a
// Julian century that a source at rest seems to have, for the FK4 turns
// (Standish 1982, A&A 115, 20; Aoki et al. 1983, A&A 128, 263; Explanatory
// Supplement to the Astronomical Almanac 1992, section 3.591).
var (
	etermsB1950  = [3]float64{-1.62557e-6, -0.31919e-6, -0.13843e-6}
	etermsChange = [3]float64{1.245e-3, -1.580e-3, -0.659e-3} // arcsec
	fk4ToFK5     = matrix{
		{0.9999256782, -0.0111820611, -0.0048579477},
		{0.0111820610, 0.9999374784, -0.0000271765},
		{0.0048579479, -0.0000271474, 0.9999881997},
	}
	fk4Motion = matrix{ // arcsec
		{-0.000551, -0.238565, 0.435739},
		{0.238514, -0.002667, -0.008541},
		{-0.435623, 0.012254, 0.002117},
	}
)

// besselian returns the Besselian epoch [yr] of a modified Julian date of TT
// (Lieske 1979, A&A 73, 282).
func besselian(mjd float64) float64 { return 1900 + (mjd-15019.81352)/365.242198781 }

func mjdOfBesselian(year float64) float64 { return 15019.81352 + (year-1900)*365.242198781 }

// newFK4 prepares the conversion for an equinox and an epoch of observation,
// both Besselian years. A source is taken to be at rest in an inertial frame.
func newFK4(equinox, epoch float64, withETerms bool) *fk4 {
	arcsec := 1 / (astro.Radian * 3600)
	f := &fk4{}
	if withETerms {
		for i := range f.eterms {
			f.eterms[i] = etermsB1950[i] + (epoch-1950)/100*etermsChange[i]*arcsec
		}
	}
	julian := (mjdOfBesselian(epoch) - 51544.5) / 36525
	for i := range 3 {
		for j := range 3 {
			f.m[i][j] = fk4ToFK5[i][j] + julian*fk4Motion[i][j]*arcsec
		}
	}
	if equinox != 1950 {
		p := newcomb(equinox, 1950)
		f.m = multiply(f.m, p)
		f.eterms = apply(transpose(p), f.eterms)
	}
	f.m = multiply(fk5ToICRS(), f.m)
	f.inverse = invert(f.m)
	return f
}

// toICRS takes a unit vector and returns one that is nearly of length 1.
func (f *fk4) toICRS(r [3]float64) [3]float64 {
	e := &f.eterms
	along := r[0]*e[0] + r[1]*e[1] + r[2]*e[2]
	for i := range r {
		r[i] += along*r[i] - e[i]
	}
	return apply(f.m, r)
}

// fromICRS is the inverse, to 1e-16: each round gains six digits.
func (f *fk4) fromICRS(r [3]float64) [3]float64 {
	d := unit(apply(f.inverse, r))
	e := &f.eterms
	place := d
	for range 4 {
		// place (1 + place·e) - e is a multiple of d.
		along := 1 + place[0]*e[0] + place[1]*e[1] + place[2]*e[2]
		length := 0.0
		for i := range place {
			length += (along*place[i] - e[i]) * d[i]
		}
		for i := range place {
			place[i] = length*d[i] + e[i]
		}
		place = unit(place)
	}
	return place
}

// newcomb returns the rotation from one Besselian equinox to another by
// Newcomb's precession, the one of the FK4 (constants: Kinoshita 1975, SAO
// Special Report 364).
func newcomb(from, to float64) matrix {
	t := (from - 1850) / 1000
	d := (to - from) / 1000
	w := 23035.545 + t*(139.720+t*0.060)
	zeta := d * (w + d*(30.240-0.27*t+d*17.995)) / 3600
	z := d * (w + d*(109.480+0.39*t+d*18.325)) / 3600
	theta := d * (20051.12 + t*(-85.29-0.37*t) + d*(-42.65-0.37*t-d*41.80)) / 3600
	return multiply(aboutZ(-z), multiply(aboutY(theta), aboutZ(-zeta)))
}

// fk5ToICRS returns the rotation from the FK5 of J2000 to the ICRS: the three
// angles between the FK5 and the Hipparcos frame (Feissel & Mignard 1998, A&A
// 331, L33), as a rotation vector.
func fk5ToICRS() matrix {
	arcsec := 1 / (astro.Radian * 3600)
	x, y, z := -19.9e-3*arcsec, -9.1e-3*arcsec, 22.9e-3*arcsec
	h := math.Sqrt(x*x + y*y + z*z)
	s, c := math.Sincos(h)
	x, y, z = x/h, y/h, z/h
	k := 1 - c
	return matrix{
		{x*x*k + c, x*y*k + z*s, x*z*k - y*s},
		{y*x*k - z*s, y*y*k + c, y*z*k + x*s},
		{z*x*k + y*s, z*y*k - x*s, z*z*k + c},
	}
}

func apply(m matrix, r [3]float64) (out [3]float64) {
	for i := range 3 {
		out[i] = m[i][0]*r[0] + m[i][1]*r[1] + m[i][2]*r[2]
	}
	return out
}

func unit(r [3]float64) [3]float64 {
	f := 1 / math.Sqrt(r[0]*r[0]+r[1]*r[1]+r[2]*r[2])
	return [3]float64{r[0] * f, r[1] * f, r[2] * f}
}

// invert returns the inverse of a matrix that is nearly a rotation.
func invert(m matrix) (out matrix) {
	for i := range 3 {
		for j := range 3 {
			a, b := (j+1)%3, (j+2)%3
			c, d := (i+1)%3, (i+2)%3
			out[i][j] = m[a][c]*m[b][d] - m[a][d]*m[b][c]
		}
	}
	det := m[0][0]*out[0][0] + m[0][1]*out[1][0] + m[0][2]*out[2][0]
	for i := range 3 {
		for j := range 3 {
			out[i][j] /= det
		}
	}
	return out
}
