// Package crossmatch finds what a user's own catalogues know of a place in the
// sky: stars, galaxies with redshift and size, variables, active nuclei.
//
// Stars are moved to the time of the observation. A supernova belongs to the
// galaxy in whose own radius, towards the supernova, it is nearest to the centre
// (Sullivan et al. 2006, ApJ 648, 868; Gupta et al. 2016, AJ 152, 154), not to
// the one at the smallest angle.
package crossmatch

import (
	"cmp"
	"fmt"
	"math"
	"slices"

	"nightsift/internal/astro"
	"nightsift/internal/usertable"
	_ "nightsift/internal/usertable/parquettable" // Parquet as well
)

// Kind says what a catalogue holds.
type Kind string

// The kinds.
const (
	Star     Kind = "star"
	Galaxy   Kind = "galaxy"
	Variable Kind = "variable"
	Nucleus  Kind = "active_nucleus"
)

// Kinds lists every kind.
var Kinds = []Kind{Star, Galaxy, Variable, Nucleus}

// Columns names the columns of a file; empty for one that it does not have.
type Columns struct {
	RA, Dec     string // deg, ICRS
	Name        string
	PMRA, PMDec string  // mas/yr, with the factor cos(dec)
	Epoch       string  // Julian year of the row's place; else Year holds for all
	Year        float64 // of the places
	Redshift    string
	SemiMajor   string // arcsec, of the ellipse that holds half of the light or another fixed part
	SemiMinor   string // arcsec
	Angle       string // deg, of the major axis, from north through east
	Mag         string
}

// Config describes a catalogue. Start from DefaultConfig.
type Config struct {
	Name    string
	File    string
	Kind    Kind
	Columns Columns
	Radius  float64 // arcsec, farthest match
	MaxDLR  float64 // directional light radii, farthest host
}

// DefaultConfig returns a radius of 2 arcsec, 30 for galaxies, and hosts within
// four directional light radii, as Gupta et al. 2016 take.
func DefaultConfig(kind Kind) Config {
	c := Config{Kind: kind, Radius: 2, MaxDLR: 4, Columns: Columns{RA: "ra", Dec: "dec", Year: 2000}}
	if kind == Galaxy {
		c.Radius = 30
	}
	return c
}

// Check reports a value out of range: its key and what is wanted.
func (c *Config) Check() (key, want string) {
	k := &c.Columns
	switch {
	case c.Name == "":
		return "name", "a name"
	case c.File == "":
		return "file", "the path of a table"
	case !slices.Contains(Kinds, c.Kind):
		return "kind", "star, galaxy, variable or active_nucleus"
	case k.RA == "" || k.Dec == "":
		return "ra", "columns of right ascension and declination"
	case (k.PMRA == "") != (k.PMDec == ""):
		return "pm_ra", "both columns of proper motion, or none"
	case k.Epoch == "" && !(k.Year >= 1800 && k.Year <= 2200):
		return "epoch", "a Julian year from 1800 to 2200, or the name of a column of them"
	case (k.SemiMajor == "") != (k.SemiMinor == "") || k.SemiMajor == "" && k.Angle != "":
		return "semi_major", "both semi-axes with the angle, or none"
	case k.SemiMajor != "" && k.Angle == "":
		return "angle", "a column, because there are semi-axes"
	case !(c.Radius > 0 && c.Radius <= 3600):
		return "radius_arcsec", "more than 0, at most 3600"
	case !(c.MaxDLR > 0 && c.MaxDLR <= 100):
		return "max_light_radii", "more than 0, at most 100"
	}
	return "", ""
}

// Catalogue is a catalogue in memory, sorted for the search by place. It is
// read-only: many goroutines may use one.
type Catalogue struct {
	Config Config

	ra, dec         []float64 // deg
	name            []string
	pmRA, pmDec     []float32 // mas/yr
	epoch           []float32 // yr after 2000
	redshift, mag   []float32
	major, minor    []float32
	angle           []float32
	fastest         float64 // mas/yr
	earliest, later float64 // yr after 2000
	zones           []int32 // first row of each zone of declination; one more at the end
}

// zoneHeight [deg] of the index: rows are sorted by zone, in a zone by right
// ascension.
const zoneHeight = 1.0 / 16

const zoneCount = int(180/zoneHeight) + 1

func zoneOf(dec float64) int { return min(zoneCount-1, max(0, int((dec+90)/zoneHeight))) }

// Len returns the number of rows.
func (c *Catalogue) Len() int { return len(c.ra) }

// Read reads a catalogue. Errors name file, line or row, and column.
func Read(cfg Config) (*Catalogue, error) {
	if key, want := cfg.Check(); key != "" {
		return nil, fmt.Errorf("catalogue %q: %s: want %s", cfg.Name, key, want)
	}
	k := &cfg.Columns
	t, err := usertable.Read(cfg.File, []usertable.Column{
		{Name: k.RA, Units: usertable.Degrees}, {Name: k.Dec, Units: usertable.Degrees},
		{Name: k.PMRA, Units: usertable.MasPerYear}, {Name: k.PMDec, Units: usertable.MasPerYear}, {Name: k.Epoch, Units: usertable.Years},
		{Name: k.Redshift}, {Name: k.SemiMajor, Units: usertable.Arcseconds}, {Name: k.SemiMinor, Units: usertable.Arcseconds},
		{Name: k.Angle, Units: usertable.Degrees}, {Name: k.Mag}, {Name: k.Name, Text: true},
	})
	if err != nil {
		return nil, fmt.Errorf("catalogue %q: %w", cfg.Name, err)
	}
	if t.Rows > math.MaxInt32 {
		return nil, fmt.Errorf("catalogue %q: %s: %d rows; want at most %d", cfg.Name, cfg.File, t.Rows, math.MaxInt32)
	}
	if err := check(t, k); err != nil {
		return nil, fmt.Errorf("catalogue %q: %w", cfg.Name, err)
	}
	c := &Catalogue{Config: cfg}
	c.fill(t)
	return c, nil
}

// check looks at every value. What stands for "unknown" is left to fill.
func check(t *usertable.Table, k *Columns) error {
	ra, dec := t.Numbers(k.RA), t.Numbers(k.Dec)
	pmRA, pmDec, epoch, z := t.Numbers(k.PMRA), t.Numbers(k.PMDec), t.Numbers(k.Epoch), t.Numbers(k.Redshift)
	const fastest = 20000 // mas/yr: faster than any known star is an error of the unit
	for i := range t.Rows {
		switch {
		case !(ra[i] >= -360 && ra[i] <= 360):
			return t.Errorf(i, k.RA, "right ascension %v; want 0 to 360 degrees", ra[i])
		case !(dec[i] >= -90 && dec[i] <= 90):
			return t.Errorf(i, k.Dec, "declination %v; want -90 to 90 degrees", dec[i])
		case k.PMRA != "" && math.Abs(pmRA[i]) > fastest:
			return t.Errorf(i, k.PMRA, "proper motion %v; want at most %d mas/yr", pmRA[i], fastest)
		case k.PMDec != "" && math.Abs(pmDec[i]) > fastest:
			return t.Errorf(i, k.PMDec, "proper motion %v; want at most %d mas/yr", pmDec[i], fastest)
		case k.Epoch != "" && !(epoch[i] >= 1800 && epoch[i] <= 2200) && epoch[i] == epoch[i]:
			return t.Errorf(i, k.Epoch, "epoch %v; want a Julian year, 1800 to 2200", epoch[i])
		case k.Epoch != "" && epoch[i] != epoch[i] && k.PMRA != "" && k.PMDec != "" && math.Hypot(pmRA[i], pmDec[i]) > 0:
			return t.Errorf(i, k.Epoch, "no epoch, though there is a proper motion; want a Julian year")
		case k.Redshift != "" && z[i] > 20:
			return t.Errorf(i, k.Redshift, "redshift %v; want at most 20, or nothing if it is unknown", z[i])
		}
	}
	return nil
}

// fill takes the columns over in the order of the index.
func (c *Catalogue) fill(t *usertable.Table) {
	k := &c.Config.Columns
	dec := t.Numbers(k.Dec)
	ra := slices.Clone(t.Numbers(k.RA))
	for i, v := range ra {
		if v < 0 {
			ra[i] = v + 360
		} else if v >= 360 {
			ra[i] = v - 360
		}
	}
	p := c.index(ra, dec)
	// Values that stand for "unknown" become NaN.
	take := func(name string, least, most float64) []float32 {
		v := t.Numbers(name)
		if name == "" || v == nil {
			return nil
		}
		out := make([]float32, len(p))
		for i, q := range p {
			out[i] = float32(math.NaN())
			if x := v[q]; x >= least && x <= most {
				out[i] = float32(x)
			}
		}
		return out
	}
	c.pmRA, c.pmDec = take(k.PMRA, -20000, 20000), take(k.PMDec, -20000, 20000)
	c.redshift, c.mag = take(k.Redshift, 1e-6, 20), take(k.Mag, -30, 40)
	c.major, c.minor, c.angle = take(k.SemiMajor, 1e-3, 3600), take(k.SemiMinor, 1e-3, 3600), take(k.Angle, -360, 360)
	if k.Name != "" {
		names := t.Texts(k.Name)
		c.name = make([]string, len(p))
		for i, q := range p {
			c.name[i] = names[q]
		}
	}
	c.earliest, c.later = k.Year-2000, k.Year-2000
	if k.Epoch != "" {
		c.epoch = take(k.Epoch, 1800, 2200)
		c.earliest, c.later = math.Inf(1), math.Inf(-1)
		for i, y := range c.epoch {
			c.epoch[i] = y - 2000
			if y == y {
				c.earliest, c.later = min(c.earliest, float64(y)-2000), max(c.later, float64(y)-2000)
			} else {
				c.epoch[i] = 0
				c.earliest, c.later = min(c.earliest, 0), max(c.later, 0)
			}
		}
	}
	for i := range c.pmRA {
		if v := math.Hypot(float64(c.pmRA[i]), float64(c.pmDec[i])); v > c.fastest {
			c.fastest = v
		}
	}
}

// index takes the places over in the order of zones, and returns that order.
func (c *Catalogue) index(ra, dec []float64) []int32 {
	p := make([]int32, len(ra))
	for i := range p {
		p[i] = int32(i)
	}
	slices.SortFunc(p, func(a, b int32) int {
		return cmp.Or(cmp.Compare(zoneOf(dec[a]), zoneOf(dec[b])), cmp.Compare(ra[a], ra[b]), cmp.Compare(a, b))
	})
	c.ra, c.dec = make([]float64, len(p)), make([]float64, len(p))
	c.zones = make([]int32, zoneCount+1)
	for i, q := range p {
		c.ra[i], c.dec[i] = ra[q], dec[q]
		c.zones[zoneOf(dec[q])+1]++
	}
	for z := range zoneCount {
		c.zones[z+1] += c.zones[z]
	}
	return p
}

// place returns where a row is at a time [yr after 2000].
//
// A star moves in a straight line through space; without a distance and a radial
// velocity its path on the sky is the great circle along its proper motion.
func (c *Catalogue) place(i int, year float64) (ra, dec float64) {
	ra, dec = c.ra[i], c.dec[i]
	if c.pmRA == nil || year != year {
		return ra, dec
	}
	e, n := float64(c.pmRA[i]), float64(c.pmDec[i])
	if e-e != 0 || n-n != 0 || e == 0 && n == 0 {
		return ra, dec
	}
	from := c.Config.Columns.Year - 2000
	if c.epoch != nil {
		from = float64(c.epoch[i])
	}
	years := year - from
	// Along a straight line the angle is the arc tangent of the way.
	way := math.Hypot(e, n) * years / 3.6e6
	angle := math.Atan(way/astro.Radian) * astro.Radian
	direction := math.Atan2(e, n) * astro.Radian
	if angle < 0 {
		angle, direction = -angle, direction+180
	}
	return astro.Offset(ra, dec, direction, angle)
}

// julianYear returns the years after 2000 of a time [MJD].
func julianYear(mjd float64) float64 { return (mjd - 51544.5) / 365.25 }

// around calls visit for every row within radius [arcsec] of a place at a time,
// with where the row then is and its distance [arcsec].
func (c *Catalogue) around(ra, dec, mjd, radius float64, visit func(row int, ra, dec, distance float64)) {
	if !(dec >= -90 && dec <= 90) || ra-ra != 0 {
		return
	}
	ra = astro.Wrap360(ra)
	year := julianYear(mjd)
	reach := radius / 3600
	if c.fastest > 0 && year == year {
		reach += c.fastest * max(math.Abs(year-c.earliest), math.Abs(year-c.later)) / 3.6e6
	}
	reach *= 1 + 1e-9
	half := 180.0 // of right ascension
	if math.Abs(dec)+reach < 90 {
		half = math.Asin(min(1, math.Sin(reach/astro.Radian)/math.Cos(dec/astro.Radian)))*astro.Radian + 1e-9
	}
	look := func(lo, hi int32, from, to float64) {
		rows := c.ra[lo:hi]
		k, _ := slices.BinarySearch(rows, from)
		for ; k < len(rows) && rows[k] <= to; k++ {
			i := int(lo) + k
			if math.Abs(c.dec[i]-dec) > reach {
				continue
			}
			a, d := c.place(i, year)
			if s := astro.Separation(ra, dec, a, d) * 3600; s <= radius {
				visit(i, a, d, s)
			}
		}
	}
	for z := zoneOf(dec - reach); z <= zoneOf(dec+reach); z++ {
		lo, hi := c.zones[z], c.zones[z+1]
		if lo == hi {
			continue
		}
		if half >= 180 {
			look(lo, hi, 0, 360)
			continue
		}
		look(lo, hi, ra-half, ra+half)
		if ra-half < 0 {
			look(lo, hi, ra-half+360, 360)
		}
		if ra+half >= 360 {
			look(lo, hi, 0, ra+half-360)
		}
	}
}
