// Package minorplanets predicts where known minor planets stand, names
// detections after them, and writes what moved in the standard form of exchange.
//
// # Elements
//
// Orbits come from a file in the one-line export format of the Minor Planet
// Center (columns below) or from a table with named columns. Each is followed as
// an ellipse about the Sun (two bodies) with light time and the observer's place
// on the Earth. The pull of the planets is left out: that and the orbit's own
// uncertainty are in the error that is given with every place, so elements should
// be of an epoch within some weeks of the night.
//
// # Accuracy
//
// The geometry agrees with an independent computation with ERFA's Earth to 0.05
// arcsec (TestAgainstERFA). Against orbits that feel Jupiter and Saturn, objects of
// the main belt are off by 0.3 arcsec (rms; at most 1.4) after 30 days, and the
// error given covers it (TestPullOfJupiter).
package minorplanets

import (
	"bufio"
	"bytes"
	"compress/gzip"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"strconv"
	"strings"

	"nightsift/internal/astro"
	"nightsift/internal/usertable"
	_ "nightsift/internal/usertable/parquettable" // Parquet as well
)

// Orbit holds osculating elements about the Sun, ecliptic and equinox of J2000.
type Orbit struct {
	Designation  string
	Epoch        float64 // MJD TT
	MeanAnomaly  float64 // deg, at Epoch
	Perihelion   float64 // deg, argument
	Node         float64 // deg, longitude of the ascending node
	Inclination  float64 // deg
	Eccentricity float64 // 0 to less than 1
	SemiMajor    float64 // au
	H, G         float64 // absolute magnitude, NaN if unknown, and slope
	Uncertainty  int     // the export format's U, 0 to 9; -1 if unknown
}

// check reports the first element out of range: its name and what is wrong.
func (o *Orbit) check() (column, text string) {
	switch {
	case o.Designation == "":
		return "designation", "it is empty"
	case !(o.Epoch >= 15020 && o.Epoch <= 88069):
		return "epoch", fmt.Sprintf("MJD %v; want one of the years 1900 to 2099", o.Epoch)
	case !(o.Eccentricity >= 0):
		return "eccentricity", fmt.Sprintf("%v; want 0 to less than 1", o.Eccentricity)
	case o.Eccentricity >= 1:
		return "eccentricity", fmt.Sprintf("%v: a parabola or hyperbola; only ellipses can be followed, take the line out", o.Eccentricity)
	case !(o.SemiMajor > 0.05 && o.SemiMajor < 1e5):
		return "semi-major axis", fmt.Sprintf("%v; want 0.05 to 100000 au", o.SemiMajor)
	case !(o.Inclination >= 0 && o.Inclination <= 180):
		return "inclination", fmt.Sprintf("%v; want 0 to 180 degrees", o.Inclination)
	}
	for _, a := range []struct {
		name  string
		value float64
	}{{"mean anomaly", o.MeanAnomaly}, {"argument of perihelion", o.Perihelion}, {"node", o.Node}} {
		if !(a.value >= -360 && a.value <= 360) {
			return a.name, fmt.Sprintf("%v; want 0 to 360 degrees", a.value)
		}
	}
	return "", ""
}

// Read reads orbits. A file of separated values, a FITS table, VOTable or Parquet
// has the columns designation, epoch_mjd (TT), mean_anomaly_deg, perihelion_deg,
// node_deg, inclination_deg, eccentricity, semi_major_au, h_mag, g_slope and
// uncertainty (the export format's U), of which the last three may be empty;
// everything else is taken for the export format. Either may be compressed with
// gzip. The error names file, line and column.
func Read(path string) ([]Orbit, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, fmt.Errorf("minor planets: %w", err)
	}
	defer f.Close()
	b := bufio.NewReaderSize(f, 1<<16)
	if head, _ := b.Peek(2); len(head) == 2 && head[0] == 0x1f && head[1] == 0x8b {
		z, err := gzip.NewReader(b)
		if err != nil {
			return nil, fmt.Errorf("minor planets %s: %w", path, err)
		}
		b = bufio.NewReaderSize(z, 1<<16)
	}
	head, _ := b.Peek(2048)
	var list []Orbit
	if looksLikeTable(head) {
		list, err = readTable(path)
	} else {
		list, err = readExport(path, b)
	}
	if err != nil {
		return nil, fmt.Errorf("minor planets: %w", err)
	}
	if len(list) == 0 {
		return nil, fmt.Errorf("minor planets: %s holds no orbit", path)
	}
	return list, nil
}

func looksLikeTable(head []byte) bool {
	for _, start := range []string{"SIMPLE  =", "PAR1", "<"} {
		if bytes.HasPrefix(bytes.TrimLeft(head, " \r\n"), []byte(start)) {
			return true
		}
	}
	for line := range bytes.Lines(head) {
		if len(bytes.TrimSpace(line)) == 0 || line[0] == '#' {
			continue
		}
		return bytes.ContainsAny(line, ",;\t") && bytes.Contains(bytes.ToLower(line), []byte("designation"))
	}
	return false
}

func readTable(path string) ([]Orbit, error) {
	numbers := []string{"epoch_mjd", "mean_anomaly_deg", "perihelion_deg", "node_deg", "inclination_deg", "eccentricity", "semi_major_au", "h_mag", "g_slope", "uncertainty"}
	want := []usertable.Column{{Name: "designation", Text: true}}
	for _, n := range numbers {
		want = append(want, usertable.Column{Name: n})
	}
	t, err := usertable.Read(path, want)
	if err != nil {
		return nil, err
	}
	list := make([]Orbit, t.Rows)
	for i := range list {
		v := func(k int) float64 { return t.Numbers(numbers[k])[i] }
		o := Orbit{Designation: t.Texts("designation")[i], Epoch: v(0), MeanAnomaly: v(1), Perihelion: v(2), Node: v(3), Inclination: v(4),
			Eccentricity: v(5), SemiMajor: v(6), H: v(7), G: v(8), Uncertainty: -1}
		if o.G != o.G {
			o.G = defaultSlope
		}
		if u := v(9); u == u {
			if u != math.Trunc(u) || u < 0 || u > 9 {
				return nil, t.Errorf(i, "uncertainty", "%v; want a whole number, 0 to 9, or nothing", u)
			}
			o.Uncertainty = int(u)
		}
		if column, text := o.check(); column != "" {
			return nil, t.Errorf(i, column, "%s", text)
		}
		list[i] = o
	}
	return list, nil
}

const defaultSlope = 0.15

// exportColumns are the fields of the export format that are read: first and last
// column, counted from 1, as its description publishes them.
var exportColumns = []struct {
	name        string
	first, last int
}{
	{"H", 9, 13}, {"G", 15, 19}, {"mean anomaly", 27, 35}, {"argument of perihelion", 38, 46}, {"node", 49, 57}, {"inclination", 60, 68},
	{"eccentricity", 71, 79}, {"semi-major axis", 93, 103},
}

// exportLength is the shortest line that holds all elements.
const exportLength = 103

// readExport reads lines of the export format. What stands before a line of dashes
// is a heading; empty lines part sections.
func readExport(path string, r io.Reader) ([]Orbit, error) {
	s := bufio.NewScanner(r)
	s.Buffer(make([]byte, 0, 4096), 1<<16)
	var list []Orbit
	var failed error
	for line := 1; s.Scan(); line++ {
		text := strings.TrimRight(s.Text(), " \r")
		switch {
		case strings.HasPrefix(text, "-----"):
			list, failed = list[:0], nil // all that came before was the heading
			continue
		case text == "" || strings.HasPrefix(text, "#") || failed != nil:
			continue
		}
		o, err := parseExport(text)
		if err != nil {
			failed = fmt.Errorf("%s:%d: %w", path, line, err)
			continue
		}
		list = append(list, o)
	}
	if err := s.Err(); err != nil {
		if errors.Is(err, bufio.ErrTooLong) {
			return nil, fmt.Errorf("%s: a line of more than %d characters; want the one-line export format, or a table with a column designation", path, 1<<16)
		}
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	return list, failed
}

// parseExport reads one line.
func parseExport(line string) (o Orbit, err error) {
	if len(line) < exportLength {
		return o, fmt.Errorf("%d characters; want at least %d, the one-line export format", len(line), exportLength)
	}
	var v [8]float64
	for k, c := range exportColumns {
		text := strings.TrimSpace(line[c.first-1 : c.last])
		if v[k], err = strconv.ParseFloat(text, 64); err != nil || v[k]-v[k] != 0 {
			if k < 2 && text == "" {
				v[k] = math.NaN()
				continue
			}
			return o, fmt.Errorf("columns %d to %d, %s: %q; want a number", c.first, c.last, c.name, text)
		}
	}
	o = Orbit{H: v[0], G: v[1], MeanAnomaly: v[2], Perihelion: v[3], Node: v[4], Inclination: v[5], Eccentricity: v[6], SemiMajor: v[7], Uncertainty: -1}
	if o.G != o.G {
		o.G = defaultSlope
	}
	if o.Epoch, err = unpackEpoch(line[20:25]); err != nil {
		return o, fmt.Errorf("columns 21 to 25, epoch: %w", err)
	}
	if len(line) > 105 && line[105] >= '0' && line[105] <= '9' {
		o.Uncertainty = int(line[105] - '0')
	}
	if len(line) >= 175 {
		o.Designation = strings.TrimSpace(line[166:min(194, len(line))])
	}
	if o.Designation == "" {
		o.Designation = unpackDesignation(strings.TrimSpace(line[:7]))
	}
	if column, text := o.check(); column != "" {
		return o, fmt.Errorf("%s: %s", column, text)
	}
	return o, nil
}

// digit is the value of a packed digit: 0 to 9, A to Z for 10 to 35, a to z for 36
// to 61; -1 for none.
func digit(c byte) int {
	switch {
	case c >= '0' && c <= '9':
		return int(c - '0')
	case c >= 'A' && c <= 'Z':
		return int(c-'A') + 10
	case c >= 'a' && c <= 'z':
		return int(c-'a') + 36
	}
	return -1
}

// unpackEpoch reads a packed date such as K264L: the century (I, J, K for 18, 19,
// 20), the year, the month 1 to C and the day 1 to V. It is the start of the day.
func unpackEpoch(s string) (mjd float64, err error) {
	if len(s) == 5 {
		c, d1, d2, m, d := digit(s[0]), digit(s[1]), digit(s[2]), digit(s[3]), digit(s[4])
		if c >= 18 && c <= 20 && d1 >= 0 && d1 <= 9 && d2 >= 0 && d2 <= 9 && m >= 1 && m <= 12 && d >= 1 && d <= 31 {
			mjd := astro.MJDOfDate(c*100+d1*10+d2, m, 1) + d - 1
			if _, month, _ := astro.DateOfMJD(mjd); month == m {
				return float64(mjd), nil
			}
		}
	}
	return 0, fmt.Errorf("%q; want a packed date such as K264L", s)
}

// unpackDesignation turns a packed number or provisional designation into the
// usual form; what it does not know stays as it is.
func unpackDesignation(s string) string {
	switch {
	case len(s) == 5 && s[0] == '~':
		n := 0
		for k := 1; k < 5; k++ {
			d := digit(s[k])
			if d < 0 {
				return s
			}
			n = n*62 + d
		}
		return fmt.Sprintf("(%d)", n+620000)
	case len(s) == 5 && digit(s[0]) >= 0:
		if n, err := strconv.Atoi(s[1:]); err == nil && s[1] >= '0' && s[1] <= '9' {
			return fmt.Sprintf("(%d)", digit(s[0])*10000+n)
		}
	case len(s) == 7 && (strings.HasPrefix(s, "PLS") || len(s) == 7 && s[0] == 'T' && s[2] == 'S'):
		survey := "P-L"
		if s[0] == 'T' {
			survey = "T-" + s[1:2]
		}
		return s[3:] + " " + survey
	case len(s) == 7:
		century, cycle, last := digit(s[0]), digit(s[4]), digit(s[5])
		year, err := strconv.Atoi(s[1:3])
		letter := func(c byte) bool { return c >= 'A' && c <= 'Z' }
		if century < 18 || century > 20 || err != nil || cycle < 0 || last < 0 || last > 9 || !letter(s[3]) || !letter(s[6]) {
			return s
		}
		number := ""
		if n := cycle*10 + last; n > 0 {
			number = strconv.Itoa(n)
		}
		return fmt.Sprintf("%d%02d %c%c%s", century, year, s[3], s[6], number)
	}
	return s
}
