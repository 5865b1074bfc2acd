package photometry

import (
	"bufio"
	"bytes"
	"cmp"
	"compress/gzip"
	"crypto/sha256"
	"encoding/csv"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"strconv"
	"strings"

	"nightsift/internal/fits"
)

// Magnitudes outside this range stand for "unknown" in many catalogues (99,
// -999); so do errors that are negative or above maxMagErr.
const (
	minMag    = -30
	maxMag    = 40
	maxMagErr = 5
)

// Read reads a catalogue: text with a line of column names, fields separated by
// commas, semicolons or tabs and comments after #, or a table of a FITS file
// ("stars.fits[STARS]" selects one, else it is the first). Either may be
// compressed with gzip. The error names file, line and column.
func Read(path string, columns Columns) (*Catalogue, error) {
	if err := columns.Check(); err != nil {
		return nil, fmt.Errorf("catalogue %s: %w", path, err)
	}
	file, hdu := fits.SplitName(path)
	f, err := os.Open(file)
	if err != nil {
		return nil, fmt.Errorf("catalogue of stars: %w", err)
	}
	defer f.Close()
	hash := sha256.New()
	r := bufio.NewReaderSize(io.TeeReader(f, hash), 1<<20)
	var text io.Reader = r
	if head, _ := r.Peek(2); len(head) == 2 && head[0] == 0x1f && head[1] == 0x8b {
		z, err := gzip.NewReader(r)
		if err != nil {
			return nil, fmt.Errorf("catalogue %s: %w", path, err)
		}
		text = z
	}
	b := bufio.NewReaderSize(text, 1<<20)
	c := &Catalogue{Path: path, Columns: columns}
	head, _ := b.Peek(9)
	if string(head) == "SIMPLE  =" {
		err = c.readFITS(path, hdu)
	} else if hdu != "" {
		err = fmt.Errorf("catalogue %s: [%s] selects a table of a FITS file, and this is none", path, hdu)
	} else {
		err = c.readText(path, b)
	}
	if err != nil {
		return nil, err
	}
	if _, err := io.Copy(hash, f); err != nil {
		return nil, fmt.Errorf("catalogue %s: %w", path, err)
	}
	c.Checksum = hex.EncodeToString(hash.Sum(nil))
	if len(c.ra) == 0 {
		return nil, fmt.Errorf("catalogue %s: it holds no star", path)
	}
	c.order()
	return c, nil
}

// readText reads lines of separated values.
func (c *Catalogue) readText(path string, b *bufio.Reader) error {
	if bom, _ := b.Peek(3); bytes.Equal(bom, []byte{0xef, 0xbb, 0xbf}) {
		b.Discard(3)
	}
	r := csv.NewReader(b)
	r.Comment, r.ReuseRecord = '#', true
	r.Comma = separator(b)
	r.TrimLeadingSpace = r.Comma != '\t' // else it eats empty fields
	wrong := func(line int, column, format string, args ...any) error {
		return fmt.Errorf("catalogue %s:%d: column %s: %s", path, line, column, fmt.Sprintf(format, args...))
	}
	csvError := func(err error) error {
		var p *csv.ParseError
		if errors.As(err, &p) {
			return fmt.Errorf("catalogue %s:%d:%d: %w", path, p.Line, p.Column, p.Err)
		}
		return fmt.Errorf("catalogue %s: %w", path, err)
	}
	header, err := r.Read()
	if err == io.EOF {
		return fmt.Errorf("catalogue %s: it is empty; want a line of column names and lines of stars", path)
	}
	if err != nil {
		return csvError(err)
	}
	headLine, _ := r.FieldPos(0)
	names := slices.Clone(header)
	for i := range names {
		names[i] = strings.TrimSpace(names[i])
	}
	find := func(name string) (int, error) {
		if name == "" {
			return -1, nil
		}
		at := -1
		for i, n := range names {
			if !strings.EqualFold(n, name) {
				continue
			}
			if at >= 0 {
				return 0, wrong(headLine, name, "it is there twice")
			}
			at = i
		}
		if at < 0 {
			return 0, wrong(headLine, name, "there is none of that name; the columns are %s", strings.Join(names, ", "))
		}
		return at, nil
	}
	k := &c.Columns
	values := k.values()
	wanted := append([]string{k.RA, k.Dec, k.PMRA, k.PMDec, k.Epoch}, values...)
	at := make([]int, len(wanted))
	for i, name := range wanted {
		if at[i], err = find(name); err != nil {
			return err
		}
	}
	store := make([][]float32, len(values))
	row := make([]float64, len(wanted))
	for {
		record, err := r.Read()
		if err == io.EOF {
			break
		}
		if err != nil {
			return csvError(err)
		}
		for i, p := range at {
			row[i] = math.NaN()
			if p < 0 {
				continue
			}
			s := strings.TrimSpace(record[p])
			if s == "" {
				continue
			}
			if row[i], err = strconv.ParseFloat(s, 64); err != nil || math.IsInf(row[i], 0) {
				line, _ := r.FieldPos(p)
				want := "a number, or nothing if it is unknown"
				if i < 2 {
					want = "decimal degrees"
				}
				return wrong(line, names[p], "%q; want %s", s, want)
			}
		}
		if bad, text := c.add(row[:5]); bad >= 0 {
			line, _ := r.FieldPos(max(0, at[bad]))
			return wrong(line, wanted[bad], "%s", text)
		}
		for i := range store {
			store[i] = append(store[i], float32(row[5+i]))
		}
	}
	c.keep(values, store)
	return nil
}

// separator chooses between the separators by the first line of names.
func separator(b *bufio.Reader) rune {
	head, _ := b.Peek(b.Size() / 2)
	for line := range bytes.Lines(head) {
		if len(bytes.TrimSpace(line)) == 0 || line[0] == '#' {
			continue
		}
		best, most := ',', bytes.Count(line, []byte{','})
		for _, s := range []rune{';', '\t'} {
			if n := bytes.Count(line, []byte(string(s))); n > most {
				best, most = s, n
			}
		}
		return best
	}
	return ','
}

// readFITS reads a table of a FITS file.
func (c *Catalogue) readFITS(path, hdu string) error {
	f, err := fits.Open(path)
	if err != nil {
		return err
	}
	defer f.Close()
	which := f.Selected
	if hdu == "" {
		which = slices.IndexFunc(f.HDUs(), func(h fits.HDU) bool { return h.Kind == fits.BinaryTable || h.Kind == fits.ASCIITable })
	}
	if which < 0 {
		return fmt.Errorf("catalogue %s: there is no table in the file", path)
	}
	t, err := f.Table(which)
	if err != nil {
		return err
	}
	k := &c.Columns
	load := func(name string, units ...string) ([]float64, error) {
		if name == "" {
			return nil, nil
		}
		v, err := t.Floats(name)
		if err != nil {
			return nil, fmt.Errorf("catalogue %s: %w", path, err)
		}
		unit := strings.ToLower(strings.ReplaceAll(strings.TrimSpace(t.Column(name).Unit), " ", ""))
		if unit != "" && len(units) > 0 && !slices.Contains(units, unit) {
			return nil, fmt.Errorf("catalogue %s: column %s has the unit %q; want %s", path, name, t.Column(name).Unit, units[0])
		}
		return v, nil
	}
	motion := []string{"mas/yr", "mas.yr-1", "masyr-1", "mas/year", "mas.yr**-1", "masyr**-1", "mas*yr-1", "mas.a-1", "mas/a"}
	fixed := make([][]float64, 5)
	wanted := []string{k.RA, k.Dec, k.PMRA, k.PMDec, k.Epoch}
	for i, units := range [][]string{{"deg", "degree", "degrees"}, {"deg", "degree", "degrees"}, motion, motion, {"yr", "a", "year"}} {
		if fixed[i], err = load(wanted[i], units...); err != nil {
			return err
		}
	}
	values := k.values()
	store := make([][]float32, len(values))
	for i, name := range values {
		v, err := load(name)
		if err != nil {
			return err
		}
		store[i] = make([]float32, len(v))
		for n, x := range v {
			store[i][n] = float32(x)
		}
	}
	var row [5]float64
	for n := range fixed[0] {
		for i, v := range fixed {
			row[i] = math.NaN()
			if v != nil {
				row[i] = v[n]
			}
		}
		if bad, text := c.add(row[:]); bad >= 0 {
			return fmt.Errorf("catalogue %s: row %d: column %s: %s", path, n+1, wanted[bad], text)
		}
	}
	c.keep(values, store)
	return nil
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
