// Package photometry finds the zero point of a frame from a user's catalogue
// of stars with known magnitudes.
//
// Read brings a catalogue into memory, ordered for look-ups by place. Match
// finds which stars of a frame stand in it, and whether as many would coincide
// by chance. Calibrate compares measured fluxes with the magnitudes:
//
//	mag = ZeroPoint − 2.5 log10(flux/count) + ColourTerm·(colour − SourceColour)
//
// so ZeroPoint is the magnitude, in the catalogue's system, of a source of one
// count that has the colour SourceColour.
//
// Matching and calibrating are two steps because they belong to two stages: the
// fluxes must be those of the same point-spread function as the fluxes of the
// candidates, which is known only when the frames are subtracted.
//
// The fit is a weighted linear one whose weights hold an unknown scatter common
// to all stars, chosen so that chi-square equals the degrees of freedom
// (Mandel & Paule 1970, Anal. Chem. 42, 1194), after a start by Tukey's
// biweight and clipping. Proper motion is straight motion in space without
// change of distance (ESA 1997, The Hipparcos Catalogue, vol. 1, sect. 1.5.5, with
// parallax and radial velocity zero).
package photometry

import (
	"fmt"
	"math"
	"slices"
	"sort"
)

// Columns says under which names a catalogue holds what. Names are compared
// without regard to upper and lower case.
type Columns struct {
	RA, Dec string // deg, ICRS
	// Mag and MagErr [mag] hold the column for each filter of the frames; the
	// one under "" serves all filters not named. MagErr may be empty.
	Mag, MagErr map[string]string
	// Colour [mag] is empty, one column, or two whose difference it is, the
	// first minus the second.
	Colour []string
	// Proper motion [mas/yr], PMRA with the factor cos(Dec). Both or none.
	PMRA, PMDec string
	Epoch       string  // column with the Julian year of the position; empty: Year for all
	Year        float64 // Julian year, such as 2016.0
}

// Filter returns the columns of magnitude and error for a filter. err is empty
// when there is none; ok is false when no magnitude is given for the filter.
func (c *Columns) Filter(filter string) (mag, err string, ok bool) {
	pick := func(m map[string]string) string {
		if name, ok := m[filter]; ok {
			return name
		}
		return m[""]
	}
	mag = pick(c.Mag)
	return mag, pick(c.MagErr), mag != ""
}

// values lists the columns of magnitudes, their errors and colours, each once,
// in a fixed order.
func (c *Columns) values() []string {
	var names []string
	add := func(n string) {
		if n != "" && !slices.Contains(names, n) {
			names = append(names, n)
		}
	}
	for _, m := range []map[string]string{c.Mag, c.MagErr} {
		keys := make([]string, 0, len(m))
		for k := range m {
			keys = append(keys, k)
		}
		sort.Strings(keys)
		for _, k := range keys {
			add(m[k])
		}
	}
	for _, n := range c.Colour {
		add(n)
	}
	return names
}

// Check reports what is contradictory.
func (c *Columns) Check() error {
	switch {
	case c.RA == "" || c.Dec == "":
		return fmt.Errorf("the columns of right ascension and declination have no name")
	case len(c.Mag) == 0:
		return fmt.Errorf("the column of magnitudes has no name")
	case len(c.Colour) > 2:
		return fmt.Errorf("the colour is made of %d columns; want one, or two whose difference it is", len(c.Colour))
	case (c.PMRA == "") != (c.PMDec == ""):
		return fmt.Errorf("proper motion needs both columns, in right ascension and in declination; found only %q", c.PMRA+c.PMDec)
	case c.PMRA != "" && c.Epoch == "" && !(c.Year >= 1800 && c.Year <= 2200):
		return fmt.Errorf("proper motion needs the Julian year of the positions, 1800 to 2200; found %v", c.Year)
	}
	for _, m := range []map[string]string{c.Mag, c.MagErr} {
		for filter, name := range m {
			if name == "" && filter != "" {
				return fmt.Errorf("the column for filter %s has no name", filter)
			}
		}
	}
	if slices.Contains(c.Colour, "") {
		return fmt.Errorf("a column of the colour has no name")
	}
	return nil
}

// Catalogue is a list of stars ordered by declination. It is read-only after
// Read: safe for concurrent use. It takes about 16 bytes a star and 4 for each
// further column.
type Catalogue struct {
	Path     string
	Checksum string // SHA-256 of the file's bytes, hexadecimal
	Columns  Columns

	ra, dec      []float64            // deg, dec ascending
	value        map[string][]float32 // by column; NaN where unknown
	pmRA, pmDec  []float32            // mas/yr; nil without
	epoch        []float32            // offset from Columns.Year or 2000 [yr]; nil: none
	year         float64              // from which epoch counts
	fastest      float64              // deg/yr, largest proper motion
	early, later float64              // yr, range of epoch
}

// Len returns the number of stars.
func (c *Catalogue) Len() int { return len(c.ra) }

// Value returns the value of a star in a column, NaN if unknown.
func (c *Catalogue) Value(column string, star int) float64 {
	if column == "" {
		return math.NaN()
	}
	v, ok := c.value[column]
	if !ok {
		panic("photometry: column " + column + " was not read")
	}
	return float64(v[star])
}

// Colour returns the colour of a star, NaN if unknown.
func (c *Catalogue) Colour(star int) float64 {
	switch len(c.Columns.Colour) {
	case 1:
		return c.Value(c.Columns.Colour[0], star)
	case 2:
		return c.Value(c.Columns.Colour[0], star) - c.Value(c.Columns.Colour[1], star)
	}
	return math.NaN()
}

// JulianYear returns the Julian year of a modified Julian date.
func JulianYear(mjd float64) float64 { return 2000 + (mjd-51544.5)/365.25 }

// Position returns the place [deg] of a star in a Julian year. With a year of
// NaN, or without proper motions, it is the place of the catalogue.
func (c *Catalogue) Position(star int, year float64) (ra, dec float64) {
	ra, dec = c.ra[star], c.dec[star]
	if c.pmRA == nil || year != year {
		return ra, dec
	}
	dt := year - c.year
	if c.epoch != nil {
		dt -= float64(c.epoch[star])
	}
	return moved(ra, dec, float64(c.pmRA[star])*dt, float64(c.pmDec[star])*dt)
}

// moved shifts a place [deg] along a straight line in space by the given
// amounts [mas] east and north on the tangent plane.
func moved(ra, dec, east, north float64) (float64, float64) {
	if east == 0 && north == 0 {
		return ra, dec
	}
	const mas = math.Pi / 180 / 3.6e6
	sa, ca := math.Sincos(ra * math.Pi / 180)
	sd, cd := math.Sincos(dec * math.Pi / 180)
	e, n := east*mas, north*mas
	x := cd*ca - e*sa - n*sd*ca
	y := cd*sa + e*ca - n*sd*sa
	z := sd + n*cd
	a := math.Atan2(y, x) * 180 / math.Pi
	if a < 0 {
		a += 360
	}
	return a, math.Atan2(z, math.Hypot(x, y)) * 180 / math.Pi
}

// Cone appends to dst the numbers of the stars within radius [deg] of a place
// [deg] in a Julian year (NaN: as catalogued), in order of declination.
func (c *Catalogue) Cone(dst []int32, ra, dec, radius, year float64) []int32 {
	pad := 0.0
	if c.pmRA != nil && year == year {
		pad = c.fastest * max(math.Abs(year-c.year-c.early), math.Abs(year-c.year-c.later))
	}
	low := sort.SearchFloat64s(c.dec, dec-radius-pad)
	cd := math.Cos(dec * math.Pi / 180)
	sr := math.Sin(min(radius, 180) * math.Pi / 360)
	// Few stars pass the test in right ascension [deg], which costs no sine.
	width := 360.0
	if top := math.Abs(dec) + radius + pad; top < 89 {
		if s := math.Sin((radius+pad)*math.Pi/180) / cd; s < 1 && radius+pad < 90 {
			width = math.Asin(s)*180/math.Pi + 1e-9
		}
	}
	for i := low; i < len(c.dec) && c.dec[i] <= dec+radius+pad; i++ {
		d := math.Abs(math.Mod(c.ra[i]-ra, 360))
		if min(d, 360-d) > width {
			continue
		}
		a, b := c.Position(i, year)
		cb := math.Cos(b * math.Pi / 180)
		// Half of the chord, exact for small separations (haversine).
		h := math.Sin((a - ra) * math.Pi / 360)
		v := math.Sin((b - dec) * math.Pi / 360)
		if v*v+cd*cb*h*h <= sr*sr {
			dst = append(dst, int32(i))
		}
	}
	return dst
}
