package crossmatch

import (
	"math"

	"nightsift/internal/astro"
	"nightsift/internal/cosmology"
)

// Match is what a catalogue has at a place. Unknown numbers are NaN.
type Match struct {
	Catalogue string
	Kind      Kind
	Name      string
	RA, Dec   float64 // deg, at the time of the observation

	Distance    float64 // arcsec, from it to the place
	East, North float64 // arcsec, of the place from it
	LightRadii  float64 // Distance in units of the directional light radius
	Host        bool    // a galaxy whose light reaches the place; or the nearest one in a catalogue without sizes
	Kiloparsec  float64 // Distance at Redshift
	Redshift    float64
	Mag         float64
	Modulus     float64 // mag, distance modulus at Redshift
}

// Absolute returns the absolute magnitude of something at the match's distance
// with the apparent magnitude given; without K-correction and dust.
func (m *Match) Absolute(mag float64) float64 { return mag - m.Modulus }

// DirectionalRadius returns the radius [as the semi-axes] of an ellipse with
// semi-axes major and minor, the major one at a position angle [deg], towards the
// position angle `towards` [deg]:
//
//	ab / √((a sin φ)² + (b cos φ)²)
//
// with φ the angle between the two (Gupta et al. 2016, AJ 152, 154, their appendix).
func DirectionalRadius(major, minor, angle, towards float64) float64 {
	sin, cos := math.Sincos((towards - angle) / astro.Radian)
	return major * minor / math.Hypot(major*sin, minor*cos)
}

// Find returns what belongs to a place (ra, dec [deg], ICRS) at a time [MJD; NaN
// leaves proper motion out]: for galaxies with sizes the one that is nearest in
// directional light radii, if within MaxDLR of them, else the nearest row within
// the radius. found is false where there is nothing.
func (c *Catalogue) Find(ra, dec, mjd float64, universe cosmology.Flat) (m Match, found bool) {
	best, bestRA, bestDec := -1, 0.0, 0.0
	least, distance, radii := math.Inf(1), 0.0, math.NaN()
	sized := false
	c.around(ra, dec, mjd, c.Config.Radius, func(row int, a, d, s float64) {
		r := math.NaN()
		if c.Config.Kind == Galaxy && c.major != nil {
			r = s / DirectionalRadius(float64(c.major[row]), float64(c.minor[row]), float64(c.angle[row]), astro.PositionAngle(a, d, ra, dec))
		}
		host := r <= c.Config.MaxDLR
		measure := s
		if host {
			measure = r
		}
		// A galaxy that holds the place goes before one that is only near.
		if host == sized && measure < least || host && !sized {
			best, bestRA, bestDec, least, distance, radii, sized = row, a, d, measure, s, r, host
		}
	})
	if best < 0 {
		return m, false
	}
	m = Match{
		Catalogue: c.Config.Name, Kind: c.Config.Kind, RA: bestRA, Dec: bestDec, Distance: distance, LightRadii: radii,
		Host:     c.Config.Kind == Galaxy && (sized || c.major == nil),
		Redshift: value(c.redshift, best), Mag: value(c.mag, best),
	}
	if c.name != nil {
		m.Name = c.name[best]
	}
	sin, cos := math.Sincos(astro.PositionAngle(bestRA, bestDec, ra, dec) / astro.Radian)
	m.East, m.North = distance*sin, distance*cos
	m.Kiloparsec = distance * universe.KiloparsecPerArcsec(m.Redshift)
	m.Modulus = universe.Modulus(m.Redshift)
	return m, true
}

// HostRedshift returns the redshift of the host among matches, 0 where there is
// none or it is not known.
func HostRedshift(matches []Match) float64 {
	for i := range matches {
		if m := &matches[i]; m.Host && m.Redshift > 0 {
			return m.Redshift
		}
	}
	return 0
}

func value(v []float32, row int) float64 {
	if v == nil {
		return math.NaN()
	}
	return float64(v[row])
}
