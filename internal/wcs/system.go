package wcs

import (
	"fmt"
	"math"

	"nightsift/internal/astro"
)

// system is what the header's longitude and latitude mean.
type system struct {
	name    string  // ICRS, FK5, FK4, FK4-NO-E or GALACTIC
	equinox float64 // year of FK5 (Julian) and of FK4 (Besselian)
	epoch   float64 // Besselian year of the exposure, of FK4
}

// system reads RADESYS and EQUINOX for axes of a name that splitCTYPE returns.
func (h header) system(axes string) (system, error) {
	switch axes {
	case "RA":
	case "G":
		return system{name: "GALACTIC"}, nil
	default:
		return system{}, fmt.Errorf("CTYPE1 = %q: want right ascension and declination, or GLON and GLAT", h.text("CTYPE1"))
	}
	equinox, hasEquinox, err := h.number("EQUINOX")
	if err != nil {
		// 'J2000' as text is a common slip.
		if equinox, hasEquinox = textEquinox(h.text("EQUINOX")); !hasEquinox {
			return system{}, err
		}
	}
	if !hasEquinox {
		// EPOCH is the older name (FITS Standard 4.0, section 8.3). Many headers
		// give the epoch of the exposure there, so other years are not believed.
		if v, ok, _ := h.number("EPOCH"); ok && (v == 1950 || v == 2000) {
			equinox, hasEquinox = v, true
		}
	}
	name := h.text("RADESYS")
	if name == "" {
		name = h.text("RADECSYS")
	}
	if name == "" {
		switch {
		case !hasEquinox:
			name = "ICRS"
		case equinox < 1984:
			name = "FK4"
		default:
			name = "FK5"
		}
	}
	switch name {
	case "ICRS":
		return system{name: "ICRS"}, nil
	case "FK5", "J2000":
		if !hasEquinox || name == "J2000" {
			equinox = 2000
		}
		if !(equinox >= 1800 && equinox <= 2200) {
			return system{}, fmt.Errorf("EQUINOX = %g; want a year from 1800 to 2200", equinox)
		}
		return system{name: "FK5", equinox: equinox}, nil
	case "FK4", "FK4-NO-E", "B1950":
		if !hasEquinox || name == "B1950" {
			equinox = 1950
		}
		if !(equinox >= 1800 && equinox <= 2000) {
			return system{}, fmt.Errorf("EQUINOX = %g; want a Besselian year from 1800 to 2000", equinox)
		}
		if name == "B1950" {
			name = "FK4"
		}
		return system{name: name, equinox: equinox, epoch: h.epoch(equinox)}, nil
	}
	return system{}, fmt.Errorf("RADESYS = %q; want ICRS, FK5, FK4 or FK4-NO-E", name)
}

// epoch returns the Besselian year of the exposure as far as the header tells
// by MJD-OBS or DATE-OBS, else the equinox. The FK4 turns, by 0.5 arcsec in a
// century, so that days do not matter.
func (h header) epoch(equinox float64) float64 {
	mjd, ok, err := h.number("MJD-OBS")
	if err != nil || !ok {
		if mjd, err = astro.ParseDate(h.text("DATE-OBS")); err != nil {
			return equinox
		}
	}
	if year := besselian(mjd); year >= 1800 && year <= 2200 {
		return year
	}
	return equinox
}

func textEquinox(s string) (float64, bool) {
	switch s {
	case "J2000", "J2000.0", "2000", "2000.0":
		return 2000, true
	case "B1950", "B1950.0", "1950", "1950.0":
		return 1950, true
	}
	return 0, false
}

type matrix = [3][3]float64

// toICRS returns the rotation from unit vectors of the system to the ICRS, but
// for FK4, whose conversion is more than a rotation.
func (s system) toICRS() (matrix, error) {
	switch s.name {
	case "ICRS":
		return identity(), nil
	case "FK5":
		if s.equinox == 2000 {
			return fk5ToICRS(), nil
		}
		return multiply(fk5ToICRS(), transpose(precession(s.equinox))), nil
	case "GALACTIC":
		// The galactic pole and the galactic longitude of the celestial pole in
		// the ICRS: the Hipparcos catalogue, ESA SP-1200, volume 1, section 1.5.3.
		return nativeToCelestial(192.85948, 27.12825, 122.93192), nil
	}
	return matrix{}, fmt.Errorf("wcs: system %q is not supported", s.name)
}

// precession returns the rotation from the mean equator and equinox of J2000 to
// those of a year: IAU 1976 (Lieske et al. 1977, A&A 58, 1), which belongs to
// the FK5 by definition.
func precession(year float64) matrix {
	t := (year - 2000) / 100
	zeta := t * (2306.2181 + t*(0.30188+t*0.017998)) / 3600
	z := t * (2306.2181 + t*(1.09468+t*0.018203)) / 3600
	theta := t * (2004.3109 - t*(0.42665+t*0.041833)) / 3600
	return multiply(aboutZ(-z), multiply(aboutY(theta), aboutZ(-zeta)))
}

// aboutZ and aboutY turn the axes of coordinates by an angle [deg].
func aboutZ(deg float64) matrix {
	s, c := sincosDeg(deg)
	return matrix{{c, s, 0}, {-s, c, 0}, {0, 0, 1}}
}

func aboutY(deg float64) matrix {
	s, c := sincosDeg(deg)
	return matrix{{c, 0, -s}, {0, 1, 0}, {s, 0, c}}
}

// nativeToCelestial returns the rotation from native unit vectors to celestial
// ones, for the native pole at (lon, lat) and the celestial pole at the native
// longitude lonpole [deg] (paper II, section 2.3, equation 2, in vectors).
func nativeToCelestial(lon, lat, lonpole float64) matrix {
	sp, cp := sincosDeg(lonpole)
	sd, cd := sincosDeg(lat)
	sa, ca := sincosDeg(lon)
	return multiply(
		matrix{{ca, -sa, 0}, {sa, ca, 0}, {0, 0, 1}},
		multiply(
			matrix{{-sd, 0, cd}, {0, -1, 0}, {cd, 0, sd}},
			matrix{{cp, sp, 0}, {-sp, cp, 0}, {0, 0, 1}}))
}

func identity() matrix { return matrix{{1, 0, 0}, {0, 1, 0}, {0, 0, 1}} }

func transpose(m matrix) (t matrix) {
	for i := range 3 {
		for j := range 3 {
			t[j][i] = m[i][j]
		}
	}
	return t
}

func multiply(a, b matrix) (c matrix) {
	for i := range 3 {
		for j := range 3 {
			for k := range 3 {
				c[i][j] += a[i][k] * b[k][j]
			}
		}
	}
	return c
}

// sincosDeg is exact at multiples of 90 deg.
func sincosDeg(deg float64) (sin, cos float64) {
	r := astro.Wrap360(deg)
	switch r {
	case 0:
		return 0, 1
	case 90:
		return 1, 0
	case 180:
		return 0, -1
	case 270:
		return -1, 0
	}
	return math.Sincos(r / astro.Radian)
}
