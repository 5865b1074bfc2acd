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
