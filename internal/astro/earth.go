package astro

import "math"

// j2000 is the epoch J2000.0 as a modified Julian date of TT.
const j2000 = 51544.5

// EarthHeliocentric returns the place of the Earth's centre as seen from the
// Sun's [au], along the axes of the ICRS, at a modified Julian date of TT. It
// sums the larger terms of VSOP87 (Bretagnon & Francou 1988, A&A 202, 309);
// against ERFA's epv00 it is right to 7e-7 au over 1900 to 2100
// (TestEarthAgainstERFA).
func EarthHeliocentric(mjdTT float64) [3]float64 {
	t := (mjdTT - j2000) / 365250
	sinL, cosL := math.Sincos(vsopSum(vsopLongitude, t))
	sinB, cosB := math.Sincos(vsopSum(vsopLatitude, t))
	r := vsopSum(vsopDistance, t)
	x, y, z := r*cosB*cosL, r*cosB*sinL, r*sinB
	// From the dynamical ecliptic of J2000 to the equator of the FK5, as the
	// paper gives it. The ICRS differs from that by 1e-7.
	return [3]float64{
		x + 0.000000440360*y - 0.000000190919*z,
		-0.000000479966*x + 0.917482137087*y - 0.397776982902*z,
		0.397776982902*y + 0.917482137087*z,
	}
}

func vsopSum(series [][]vsopTerm, t float64) float64 {
	sum := 0.0
	for n := len(series) - 1; n >= 0; n-- {
		s := 0.0
		for _, k := range series[n] {
			s += k.a * math.Cos(k.b+k.c*t)
		}
		sum = sum*t + s
	}
	return sum
}

// earthVelocity returns the velocity of the Earth about the Sun [au/d], right
// to 1e-7 au/d. About the barycentre it differs by the Sun's own, 1e-5 au/d.
func earthVelocity(mjdTT float64) (v [3]float64) {
	const step = 0.25
	a, b := EarthHeliocentric(mjdTT-step), EarthHeliocentric(mjdTT+step)
	for i := range v {
		v[i] = (b[i] - a[i]) / (2 * step)
	}
	return v
}
