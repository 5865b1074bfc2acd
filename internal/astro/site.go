package astro

import "math"

// Site is a place on the Earth in the world geodetic system WGS84.
type Site struct {
	Longitude float64 // [deg], east positive
	Latitude  float64 // geodetic [deg], north positive
	Height    float64 // above the ellipsoid [m]
}

// au is the astronomical unit [m] (IAU resolution B2, 2012).
const au = 149597870700

// fixed returns the place of the site [m] on axes that turn with the Earth: x
// to Greenwich, z to the north pole.
func (s Site) fixed() (x, y, z float64) {
	const (
		radius     = 6378137
		flattening = 1 / 298.257223563
		squeeze    = (1 - flattening) * (1 - flattening)
	)
	sinLon, cosLon := math.Sincos(s.Longitude / Radian)
	sinLat, cosLat := math.Sincos(s.Latitude / Radian)
	curvature := radius / math.Sqrt(cosLat*cosLat+squeeze*sinLat*sinLat)
	across := (curvature + s.Height) * cosLat
	return across * cosLon, across * sinLon, (squeeze*curvature + s.Height) * sinLat
}

// SiteGeocentric returns the place of a site as seen from the Earth's centre
// [au], along the axes of the ICRS, at a modified Julian date of UTC. As polar
// motion and UT1 - UTC are left out, it is off by up to 430 m, 3e-9 au.
func SiteGeocentric(site Site, mjdUTC float64) [3]float64 {
	m, equation := equatorOfDate(UTCToTT(mjdUTC))
	x, y, z := site.fixed()
	sin, cos := math.Sincos(GreenwichMeanSidereal(mjdUTC)/Radian + equation)
	p := [3]float64{cos*x - sin*y, sin*x + cos*y, z}
	var out [3]float64
	for j := range out {
		out[j] = (m[0][j]*p[0] + m[1][j]*p[1] + m[2][j]*p[2]) / au
	}
	return out
}

// AltAz returns altitude and azimuth [deg, from north through east, in
// [0, 360)] of a place (ra, dec [deg], ICRS) that a site sees at a modified
// Julian date of UTC, without refraction. Precession, nutation and the annual
// aberration are in it; proper motion, parallax, the bending of light at the Sun,
// diurnal aberration (0.3 arcsec) and polar motion are not. UT1 is taken as UTC,
// which turns the sky by up to 14 arcsec; but for that it is right to 1 arcsec
// (TestTimesAgainstAstropy). At the zenith the azimuth means nothing.
func AltAz(site Site, mjdUTC, ra, dec float64) (altitude, azimuth float64) {
	const lightSpeed = 299792458. * secondsPerDay / au // [au/d]
	mjdTT := UTCToTT(mjdUTC)
	sinRA, cosRA := math.Sincos(ra / Radian)
	sinDec, cosDec := math.Sincos(dec / Radian)
	p := [3]float64{cosDec * cosRA, cosDec * sinRA, sinDec}
	v := earthVelocity(mjdTT)
	for i := range p {
		p[i] += v[i] / lightSpeed
	}
	m, equation := equatorOfDate(mjdTT)
	m = turnZ(m, GreenwichMeanSidereal(mjdUTC)/Radian+equation+site.Longitude/Radian)
	// Along the site's meridian, to the east and along the Earth's axis.
	meridian := m[0][0]*p[0] + m[0][1]*p[1] + m[0][2]*p[2]
	east := m[1][0]*p[0] + m[1][1]*p[1] + m[1][2]*p[2]
	pole := m[2][0]*p[0] + m[2][1]*p[1] + m[2][2]*p[2]
	sinLat, cosLat := math.Sincos(site.Latitude / Radian)
	up := cosLat*meridian + sinLat*pole
	north := cosLat*pole - sinLat*meridian
	return math.Atan2(up, math.Hypot(north, east)) * Radian, Wrap360(math.Atan2(east, north) * Radian)
}
