package astro

import "math"

const arcsec = 1 / (3600 * Radian) // in radians

type matrix = [3][3]float64

// nutationTerm is one term of the nutation: multiples of the Moon's and the
// Sun's mean anomaly, the Moon's argument of latitude, elongation and node; the
// sine in longitude and its change in a century, the cosine in obliquity and
// its change, in 1e-7 arcsec.
type nutationTerm struct {
	l, lp, f, d, node          float64
	psi, psiRate, eps, epsRate float64
}

// nutationTerms are the largest terms of the model IAU 2000B (McCarthy & Luzum
// 2003, Celest. Mech. Dyn. Astron. 85, 37).
var nutationTerms = []nutationTerm{
	{0, 0, 0, 0, 1, -172064161, -174666, 92052331, 9086},
	{0, 0, 2, -2, 2, -13170906, -1675, 5730336, -3015},
	{0, 0, 2, 0, 2, -2276413, -234, 978459, -485},
	{0, 0, 0, 0, 2, 2074554, 207, -897492, 470},
	{0, 1, 0, 0, 0, 1475877, -3633, 73871, -184},
	{0, 1, 2, -2, 2, -516821, 1226, 224386, -677},
	{1, 0, 0, 0, 0, 711159, 73, -6750, 0},
	{0, 0, 2, 0, 1, -387298, -367, 200728, 18},
	{1, 0, 2, 0, 2, -301461, -36, 129025, -63},
	{0, -1, 2, -2, 2, 215829, -494, -95929, 299},
	{0, 0, 2, -2, 1, 128227, 137, -68982, -9},
	{-1, 0, 2, 0, 2, 123457, 11, -53311, 32},
	{-1, 0, 0, 2, 0, 156994, 10, -1235, 0},
	{1, 0, 0, 0, 1, 63110, 63, -33228, 0},
	{-1, 0, 0, 0, 1, -57976, -63, 31429, 0},
	{-1, 0, 2, 2, 2, -59641, -11, 25543, -11},
	{1, 0, 2, 0, 1, -51613, -42, 26366, 0},
	{-2, 0, 2, 0, 1, 45893, 50, -24236, -10},
	{0, 0, 0, 2, 0, 63384, 11, -1220, 0},
	{0, 0, 2, 2, 2, -38571, -1, 16452, -11},
}

// nutation returns the nutation in longitude and in obliquity [rad], right to
// 0.03 arcsec, at t Julian centuries of TT since J2000.
func nutation(t float64) (psi, eps float64) {
	l := (485868.249036 + t*(1717915923.2178+t*31.8792)) * arcsec
	lp := (1287104.79305 + t*(129596581.0481-t*0.5532)) * arcsec
	f := (335779.526232 + t*(1739527262.8478-t*12.7512)) * arcsec
	d := (1072260.70369 + t*(1602961601.2090-t*6.3706)) * arcsec
	node := (450160.398036 - t*(6962890.5431-t*7.4722)) * arcsec
	for _, k := range nutationTerms {
		sin, cos := math.Sincos(k.l*l + k.lp*lp + k.f*f + k.d*d + k.node*node)
		psi += (k.psi + k.psiRate*t) * sin
		eps += (k.eps + k.epsRate*t) * cos
	}
	return psi * 1e-7 * arcsec, eps * 1e-7 * arcsec
}

// equatorOfDate returns the rotation from the ICRS to the true equator and
// equinox of a date of TT, and the equation of the equinoxes [rad]: precession
// IAU 2006 in the four angles of Fukushima and Williams (Hilton et al. 2006,
// Celest. Mech. Dyn. Astron. 94, 351) and nutation.
func equatorOfDate(mjdTT float64) (m matrix, equation float64) {
	t := (mjdTT - j2000) / 36525
	gamma := (-0.052928 + t*(10.556378+t*(0.4932044+t*(-0.00031238+t*(-0.000002788+t*0.0000000260))))) * arcsec
	phi := (84381.412819 + t*(-46.811016+t*(0.0511268+t*(0.00053289+t*(-0.000000440-t*0.0000000176))))) * arcsec
	psi := (-0.041775 + t*(5038.481484+t*(1.5584175+t*(-0.00018522+t*(-0.000026452-t*0.0000000148))))) * arcsec
	eps := (84381.406 + t*(-46.836769+t*(-0.0001831+t*(0.00200340+t*(-0.000000576-t*0.0000000434))))) * arcsec
	dpsi, deps := nutation(t)
	m = turnX(turnZ(turnX(turnZ(matrix{{1, 0, 0}, {0, 1, 0}, {0, 0, 1}}, gamma), phi), -(psi+dpsi)), -(eps + deps))
	return m, dpsi * math.Cos(eps)
}

// turnX and turnZ turn the axes of m by an angle [rad] about their own.
func turnX(m matrix, angle float64) matrix {
	s, c := math.Sincos(angle)
	for j := range 3 {
		y, z := m[1][j], m[2][j]
		m[1][j], m[2][j] = c*y+s*z, c*z-s*y
	}
	return m
}

func turnZ(m matrix, angle float64) matrix {
	s, c := math.Sincos(angle)
	for j := range 3 {
		x, y := m[0][j], m[1][j]
		m[0][j], m[1][j] = c*x+s*y, c*y-s*x
	}
	return m
}

// GreenwichMeanSidereal returns the mean sidereal time at Greenwich [deg], in
// [0, 360), at a modified Julian date of UT1: the Earth rotation angle and the
// precession IAU 2006 (Capitaine et al. 2003, A&A 412, 567). With UTC for UT1 it
// is off by up to 0.9 s, 14 arcsec.
func GreenwichMeanSidereal(mjdUT1 float64) float64 {
	t := (UTCToTT(mjdUT1) - j2000) / 36525
	day := math.Floor(mjdUT1)
	turns := mjdUT1 - day + 0.5 + 0.7790572732640 + math.Mod(0.00273781191135448*(mjdUT1-j2000), 1)
	return Wrap360(360*turns + (0.014506+t*(4612.156534+t*(1.3915817+t*(-0.00000044-t*0.000029956))))/3600)
}

// GreenwichApparentSidereal returns the apparent sidereal time at Greenwich
// [deg], in [0, 360), at a modified Julian date of UT1: the mean one and the
// nutation. It is right to 0.01 s of time.
func GreenwichApparentSidereal(mjdUT1 float64) float64 {
	_, equation := equatorOfDate(UTCToTT(mjdUT1))
	return Wrap360(GreenwichMeanSidereal(mjdUT1) + equation*Radian)
}
