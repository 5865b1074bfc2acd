package photometry

import (
	"cmp"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"strings"

	"nightsift/internal/fits"
	"nightsift/internal/usertable"
)

// Magnitudes outside this range stand for "unknown" in many catalogues (99,
// -999); so do errors that are negative or above maxMagErr.
const (
	minMag    = -30
	maxMag    = 40
	maxMagErr = 5
)

// Read reads a catalogue: text with a line of column names, fields separated by
// commas, semicolons or tabs and comments after #, a table of a FITS file
// ("stars.fits[STARS]" selects one, else it is the first), or a VOTable.
// Text, FITS and VOTable may be compressed with gzip. The error names file, line
// and column.
func Read(path string, columns Columns) (*Catalogue, error) {
	if err := columns.Check(); err != nil {
		return nil, fmt.Errorf("catalogue %s: %w", path, err)
	}
	c := &Catalogue{Path: path, Columns: columns}
	var err error
	if c.Checksum, err = checksum(path); err != nil {
		return nil, fmt.Errorf("catalogue of stars: %w", err)
	}
	k := &c.Columns
	fixed := []usertable.Column{
		{Name: k.RA, Units: usertable.Degrees, Want: "decimal degrees"}, {Name: k.Dec, Units: usertable.Degrees, Want: "decimal degrees"},
		{Name: k.PMRA, Units: usertable.MasPerYear}, {Name: k.PMDec, Units: usertable.MasPerYear}, {Name: k.Epoch, Units: usertable.Years},
	}
	values := k.values()
	var want []usertable.Column
	add := func(w usertable.Column) {
		if w.Name != "" && !slices.ContainsFunc(want, func(o usertable.Column) bool { return strings.EqualFold(o.Name, w.Name) }) {
			want = append(want, w)
		}
	}
	for _, w := range fixed {
		add(w)
	}
	for _, name := range values {
		add(usertable.Column{Name: name})
	}
	t, err := usertable.Read(path, want)
	if err != nil {
		return nil, fmt.Errorf("catalogue %w", err)
	}
	if t.Rows == 0 {
		return nil, fmt.Errorf("catalogue %s: it holds no star", path)
	}
	var row [5]float64
	for n := range t.Rows {
		for i, w := range fixed {
			row[i] = math.NaN()
			if w.Name != "" {
				row[i] = t.Numbers(w.Name)[n]
			}
		}
		if bad, text := c.add(row[:]); bad >= 0 {
			return nil, fmt.Errorf("catalogue %w", t.Errorf(n, fixed[bad].Name, "%s", text))
		}
	}
	store := make([][]float32, len(values))
	for i, name := range values {
		store[i] = make([]float32, t.Rows)
		for n, x := range t.Numbers(name) {
			store[i][n] = float32(x)
		}
	}
	c.keep(values, store)
	c.order()
	return c, nil
}

// checksum returns the SHA-256 of a file, hexadecimal.
func checksum(path string) (string, error) {
	file, _ := fits.SplitName(path)
	f, err := os.Open(file)
	if err != nil {
		return "", err
	}
	defer f.Close()
	hash := sha256.New()
	if _, err := io.Copy(hash, f); err != nil {
		return "", err
	}
	return hex.EncodeToString(hash.Sum(nil)), nil
}

// add appends the place of one star: right ascension, declination, its proper
// motion and epoch. It returns which of the five is wrong, or -1.
func (c *Catalogue) add(v []float64) (bad int, text string) {
	ra, dec := v[0], v[1]
	switch {
	case !(ra >= -360 && ra <= 360):
		return 0, fmt.Sprintf("right ascension %v; want 0 to 360 degrees", ra)
	case !(dec >= -90 && dec <= 90):
		return 1, fmt.Sprintf("declination %v; want -90 to 90 degrees", dec)
	}
	if ra < 0 {
		ra += 360
	}
	if ra >= 360 {
		ra -= 360
	}
	c.ra, c.dec = append(c.ra, ra), append(c.dec, dec)
	if c.Columns.PMRA == "" {
		return -1, ""
	}
	// Faster than any known star is an error of the unit.
	const most = 20000
	for i, m := range v[2:4] {
		if math.Abs(m) > most {
			return 2 + i, fmt.Sprintf("proper motion %v; want at most %d mas/yr", m, most)
		}
	}
	known := v[2] == v[2] && v[3] == v[3]
	e, n := float32(v[2]), float32(v[3])
	if !known {
		e, n = 0, 0
	}
	c.pmRA, c.pmDec = append(c.pmRA, e), append(c.pmDec, n)
	if c.Columns.Epoch != "" {
		year := v[4]
		if !(year >= 1800 && year <= 2200) {
			if known {
				return 4, fmt.Sprintf("epoch %v; want a Julian year, 1800 to 2200", year)
			}
			year = 2000
		}
		c.epoch = append(c.epoch, float32(year-2000))
	}
	return -1, ""
}

// keep stores the columns of values; what stands for "unknown" becomes NaN.
func (c *Catalogue) keep(names []string, store [][]float32) {
	c.value = map[string][]float32{}
	errs := map[string]bool{}
	for _, n := range c.Columns.MagErr {
		errs[n] = true
	}
	nan := float32(math.NaN())
	for i, v := range store {
		for n, x := range v {
			if errs[names[i]] && !(x >= 0 && x <= maxMagErr) || !(x > minMag && x < maxMag) {
				v[n] = nan
			}
		}
		c.value[names[i]] = v
	}
	c.year = c.Columns.Year
	if c.epoch != nil {
		c.year = 2000
		c.early, c.later = float64(slices.Min(c.epoch)), float64(slices.Max(c.epoch))
	}
	for i := range c.pmRA {
		c.fastest = max(c.fastest, math.Hypot(float64(c.pmRA[i]), float64(c.pmDec[i]))/3.6e6)
	}
}

// order sorts the stars by declination, equal ones by right ascension and then as read.
func (c *Catalogue) order() {
	p := make([]int32, len(c.ra))
	for i := range p {
		p[i] = int32(i)
	}
	slices.SortFunc(p, func(a, b int32) int {
		return cmp.Or(cmp.Compare(c.dec[a], c.dec[b]), cmp.Compare(c.ra[a], c.ra[b]), cmp.Compare(a, b))
	})
	c.ra, c.dec = permuted(c.ra, p), permuted(c.dec, p)
	c.pmRA, c.pmDec, c.epoch = permuted(c.pmRA, p), permuted(c.pmDec, p), permuted(c.epoch, p)
	for name, v := range c.value {
		c.value[name] = permuted(v, p)
	}
}

func permuted[T any](v []T, p []int32) []T {
	if v == nil {
		return nil
	}
	out := make([]T, len(v))
	for i, k := range p {
		out[i] = v[k]
	}
	return out
}
