package photometry

import (
	"compress/gzip"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"nightsift/internal/fits"
	"nightsift/internal/outside"
)

func plainColumns() Columns {
	return Columns{RA: "ra", Dec: "dec", Mag: map[string]string{"": "mag"}, Year: 2016}
}

func file(t testing.TB, name, text string) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), name)
	if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
	return path
}

func TestReadText(t *testing.T) {
	const rows = "12.5,-3.25,18.125,0.02\n# a remark\n-10,45,17.5,\n350.25 , 44.5 ,99.99,-1\n1,2,,0.01\n"
	for name, text := range map[string]string{
		"commas":     "RA,Dec,Rmag,Err\n" + rows,
		"mark":       "\ufeffRA,Dec,Rmag,Err\n" + rows,
		"remark":     "# made by hand; with ; in it\nRA,Dec,Rmag,Err\n" + rows,
		"semicolons": strings.ReplaceAll("RA,Dec,Rmag,Err\n"+rows, ",", ";"),
		"tabs":       strings.ReplaceAll("RA,Dec,Rmag,Err\n"+rows, ",", "\t"),
		"returns":    strings.ReplaceAll("RA,Dec,Rmag,Err\n"+rows, "\n", "\r\n"),
		"no end":     strings.TrimSuffix("RA,Dec,Rmag,Err\n"+rows, "\n"),
		"more":       "name,RA,Dec,Rmag,Err\n\"a, b\",12.5,-3.25,18.125,0.02\nx,-10,45,17.5,\nx,350.25,44.5,99.99,-1\n,1,2,,0.01\n",
	} {
		k := Columns{RA: "ra", Dec: "dec", Mag: map[string]string{"r": "rmag"}, MagErr: map[string]string{"r": "err"}}
		path := file(t, "stars.csv", text)
		c, err := Read(path, k)
		if err != nil {
			t.Errorf("%s: %v", name, err)
			continue
		}
		got := fmt.Sprint(c.ra, c.dec, c.value["rmag"], c.value["err"])
		want := "[12.5 1 350.25 350] [-3.25 2 44.5 45] [18.125 NaN NaN 17.5] [0.02 0.01 NaN NaN]"
		if got != want {
			t.Errorf("%s: found %s, expected %s", name, got, want)
		}
		sum := sha256.Sum256([]byte(text))
		if c.Checksum != hex.EncodeToString(sum[:]) {
			t.Errorf("%s: checksum %s", name, c.Checksum)
		}
	}
}

func TestBadCatalogues(t *testing.T) {
	moving := plainColumns()
	moving.PMRA, moving.PMDec = "pmra", "pmdec"
	epochs := moving
	epochs.Epoch = "year"
	half := moving
	half.PMDec = ""
	const head = "ra,dec,mag\n"
	for _, c := range []struct {
		name, text string
		columns    Columns
		want       []string
	}{
		{"empty", "", plainColumns(), []string{"stars.csv", "empty"}},
		{"no star", head, plainColumns(), []string{"stars.csv", "no star"}},
		{"no column", "ra,dec,rmag\n1,2,3\n", plainColumns(), []string{"stars.csv:1", "column mag", "ra, dec, rmag"}},
		{"twice", "ra,dec,mag,MAG\n1,2,3,4\n", plainColumns(), []string{"stars.csv:1", "column mag", "twice"}},
		{"word", head + "1,2,3\n1,x2,3\n", plainColumns(), []string{"stars.csv:3", "column dec", `"x2"`, "decimal degrees"}},
		{"sexagesimal", head + "12:30:00,2,3\n", plainColumns(), []string{"stars.csv:2", "column ra", "decimal degrees"}},
		{"infinite", head + "1,2,inf\n", plainColumns(), []string{"stars.csv:2", "column mag", `"inf"`}},
		{"short", head + "1,2,3\n4,5\n", plainColumns(), []string{"stars.csv:3", "number of fields"}},
		{"quote", head + "1,2,\"3\n", plainColumns(), []string{"stars.csv:", "\""}},
		{"no place", head + "1,,3\n", plainColumns(), []string{"stars.csv:2", "column dec", "-90 to 90"}},
		{"pole", head + "# one\n1,91,3\n", plainColumns(), []string{"stars.csv:3", "column dec", "91"}},
		{"hours", head + "1000,1,3\n", plainColumns(), []string{"stars.csv:2", "column ra", "1000"}},
		{"half a motion", head + "1,2,3\n", half, []string{"stars.csv", "both columns"}},
		{"fast", "ra,dec,mag,pmra,pmdec\n1,2,3,4,-5e5\n", moving, []string{"stars.csv:2", "column pmdec", "mas/yr"}},
		{"no epoch", "ra,dec,mag,pmra,pmdec,year\n1,2,3,4,5,\n", epochs, []string{"stars.csv:2", "column year", "Julian year"}},
		{"table of text", head + "1,2,3\n", plainColumns(), nil},
	} {
		path := file(t, "stars.csv", c.text)
		if c.want == nil {
			path += "[STARS]"
			c.want = []string{"FITS"}
		}
		_, err := Read(path, c.columns)
		if err == nil {
			t.Errorf("%s: no error", c.name)
			continue
		}
		for _, w := range c.want {
			if !strings.Contains(err.Error(), w) {
				t.Errorf("%s: %q is missing in %q", c.name, w, err)
			}
		}
	}
	if _, err := Read(filepath.Join(t.TempDir(), "none.csv"), plainColumns()); err == nil || !strings.Contains(err.Error(), "none.csv") {
		t.Errorf("missing file: %v", err)
	}
}

// The same stars as text, as text in gzip and as FITS are the same catalogue.
func TestFormatsAgree(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	const n = 500
	ra, dec, mag, e, n2 := make([]float64, n), make([]float64, n), make([]float32, n), make([]float64, n), make([]float32, n)
	var text strings.Builder
	text.WriteString("RA,DEC,rmag,PMRA,PMDEC\n")
	for i := range n {
		ra[i], dec[i], mag[i] = 360*r.Float64(), 180*r.Float64()-90, 20*r.Float32()
		e[i], n2[i] = 100*r.NormFloat64(), float32(100*r.NormFloat64())
		fmt.Fprintf(&text, "%v,%v,%v,%v,%v\n", ra[i], dec[i], mag[i], e[i], n2[i])
	}
	k := Columns{RA: "ra", Dec: "dec", Mag: map[string]string{"r": "rmag"}, PMRA: "pmra", PMDec: "pmdec", Year: 2015.5}
	plain := file(t, "stars.csv", text.String())
	packed := filepath.Join(t.TempDir(), "stars.csv.gz")
	f, err := os.Create(packed)
	if err != nil {
		t.Fatal(err)
	}
	z := gzip.NewWriter(f)
	z.Write([]byte(text.String()))
	if err := z.Close(); err != nil {
		t.Fatal(err)
	}
	f.Close()
	table := func(unit string) string {
		path := filepath.Join(t.TempDir(), "stars.fits")
		err := fits.Write(path, nil, &fits.Table{Name: "STARS", Columns: []fits.Column{
			{Name: "RA", Unit: unit, Data: ra}, {Name: "DEC", Unit: "deg", Data: dec}, {Name: "RMAG", Unit: "mag", Data: mag},
			{Name: "PMRA", Unit: "mas/yr", Data: e}, {Name: "PMDEC", Unit: "mas.yr-1", Data: n2}}})
		if err != nil {
			t.Fatal(err)
		}
		return path
	}
	want, err := Read(plain, k)
	if err != nil {
		t.Fatal(err)
	}
	binary := table("deg")
	for _, path := range []string{packed, binary, binary + "[STARS]"} {
		got, err := Read(path, k)
		if err != nil {
			t.Errorf("%v", err)
			continue
		}
		if !slices.Equal(got.ra, want.ra) || !slices.Equal(got.dec, want.dec) || !slices.Equal(got.value["rmag"], want.value["rmag"]) ||
			!slices.Equal(got.pmRA, want.pmRA) || !slices.Equal(got.pmDec, want.pmDec) {
			t.Errorf("%s: the stars differ from those of the text", path)
		}
		data, err := os.ReadFile(strings.TrimSuffix(path, "[STARS]"))
		if err != nil {
			t.Fatal(err)
		}
		if sum := sha256.Sum256(data); got.Checksum != hex.EncodeToString(sum[:]) {
			t.Errorf("%s: checksum %s", path, got.Checksum)
		}
	}
	if _, err := Read(table("rad"), k); err == nil || !strings.Contains(err.Error(), "column ra") || !strings.Contains(err.Error(), "deg") {
		t.Errorf("radians: %v", err)
	}
	k.RA = "alpha"
	if _, err := Read(binary, k); err == nil || !strings.Contains(err.Error(), "alpha") {
		t.Errorf("missing column: %v", err)
	}
}

// Cone against the angle of every star, at poles, over the wrap and with motion.
func TestConeAgainstAllStars(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	c := &Catalogue{Columns: Columns{PMRA: "a", PMDec: "d"}, year: 2000, value: map[string][]float32{}}
	for range 5000 {
		dec := 180 / math.Pi * math.Asin(2*r.Float64()-1)
		if r.IntN(4) == 0 {
			dec = 89 + r.Float64()
		}
		c.add([]float64{360 * r.Float64(), dec, 8000 * r.NormFloat64() / 4, 8000 * r.NormFloat64() / 4, 0})
	}
	c.keep(nil, nil)
	c.year = 2000
	c.order()
	for k := range 250 {
		ra, dec, radius := 360*r.Float64(), 180*r.Float64()-90, 3*r.Float64()
		switch k % 5 {
		case 0:
			dec = 89.5
		case 1:
			ra = 0.01
		case 2:
			radius = 50 * r.Float64()
		case 3:
			dec = -90
		}
		year := 1950 + 100*r.Float64()
		got := c.Cone(nil, ra, dec, radius, year)
		var want []int32
		for i := range c.Len() {
			a, d := c.Position(i, year)
			if separation(ra, dec, a, d) <= radius {
				want = append(want, int32(i))
			}
		}
		if !slices.Equal(got, want) {
			t.Fatalf("cone of %.3f deg about %.3f %.3f: %d stars, expected %d", radius, ra, dec, len(got), len(want))
		}
	}
}

// separation by the cross and dot products of unit vectors.
func separation(ra1, dec1, ra2, dec2 float64) float64 {
	v := func(ra, dec float64) [3]float64 {
		sa, ca := math.Sincos(ra * math.Pi / 180)
		sd, cd := math.Sincos(dec * math.Pi / 180)
		return [3]float64{cd * ca, cd * sa, sd}
	}
	a, b := v(ra1, dec1), v(ra2, dec2)
	x, y, z := a[1]*b[2]-a[2]*b[1], a[2]*b[0]-a[0]*b[2], a[0]*b[1]-a[1]*b[0]
	return math.Atan2(math.Sqrt(x*x+y*y+z*z), a[0]*b[0]+a[1]*b[1]+a[2]*b[2]) * 180 / math.Pi
}

// Positions at the exposure's epoch against astropy's SkyCoord.apply_space_motion.
func TestProperMotionAgainstAstropy(t *testing.T) {
	r := rand.New(rand.NewPCG(8, 8))
	const n = 60
	var text strings.Builder
	text.WriteString("ra,dec,mag,pmra,pmdec,year\n")
	rows := make([][]float64, n)
	for i := range rows {
		dec := 170*r.Float64() - 85
		if i < 6 {
			dec = []float64{89.9, -89.9, 89.99, 0, 45, -45}[i]
		}
		rows[i] = []float64{360 * r.Float64(), dec, 3000 * r.NormFloat64(), 3000 * r.NormFloat64(), 1991.25 + 30*r.Float64()}
		if i > 30 {
			rows[i][2], rows[i][3] = 20*r.NormFloat64(), 20*r.NormFloat64()
		}
		for k := 2; k < 5; k++ {
			rows[i][k] = float64(float32(math.Round(rows[i][k]*100) / 100))
		}
		rows[i][4] = 2000 + float64(float32(rows[i][4]-2000))
		fmt.Fprintf(&text, "%v,%v,12,%v,%v,%v\n", rows[i][0], rows[i][1], rows[i][2], rows[i][3], rows[i][4])
	}
	k := plainColumns()
	k.PMRA, k.PMDec, k.Epoch = "pmra", "pmdec", "year"
	c, err := Read(file(t, "stars.csv", text.String()), k)
	if err != nil {
		t.Fatal(err)
	}
	const mjd = 61345.25
	data, err := json.Marshal(map[string]any{"rows": rows, "mjd": mjd})
	if err != nil {
		t.Fatal(err)
	}
	out := outside.Python(t, `
import json, sys
import numpy as np
import astropy.units as u
from astropy.coordinates import SkyCoord, Distance
from astropy.time import Time
from astropy.utils import iers
iers.conf.auto_download = False
d = json.loads(sys.argv[1])
r = np.array(d["rows"]).T
when = Time(d["mjd"], format="mjd", scale="tdb")
# Not so far away that these motions come near the speed of light.
s = SkyCoord(r[0]*u.deg, r[1]*u.deg, pm_ra_cosdec=r[2]*u.mas/u.yr, pm_dec=r[3]*u.mas/u.yr,
             distance=np.full(len(r[0]), 10.0)*u.pc, radial_velocity=np.zeros(len(r[0]))*u.km/u.s, obstime=Time(r[4], format="jyear", scale="tdb"))
m = s.apply_space_motion(new_obstime=when)
print(json.dumps([m.ra.deg.tolist(), m.dec.deg.tolist()]))
`, string(data))
	var got [2][]float64
	if err := json.Unmarshal(out, &got); err != nil {
		t.Fatal(err)
	}
	worst, largest := 0.0, 0.0
	year := JulianYear(mjd)
	for i, row := range rows {
		at := -1
		for s := range c.Len() {
			if c.ra[s] == row[0] && c.dec[s] == row[1] {
				at = s
			}
		}
		if at < 0 {
			t.Fatalf("star %d is lost", i)
		}
		a, d := c.Position(at, year)
		worst = max(worst, separation(a, d, got[0][i], got[1][i])*3.6e6)
		largest = max(largest, separation(row[0], row[1], got[0][i], got[1][i])*3600)
	}
	t.Logf("motions of up to %.1f arcsec agree to %.3f mas", largest, worst)
	if worst > 0.3 || largest < 50 {
		t.Errorf("positions differ by %.3f mas, of motions up to %.1f arcsec", worst, largest)
	}
	if a, d := c.Position(0, math.NaN()); a != c.ra[0] || d != c.dec[0] {
		t.Error("without a date the star has moved")
	}
}

func BenchmarkRead(b *testing.B) {
	const n = 200000
	r := rand.New(rand.NewPCG(1, 1))
	var text strings.Builder
	text.WriteString("id,ra,dec,gmag,rmag,err\n")
	for i := range n {
		fmt.Fprintf(&text, "%d,%.7f,%.7f,%.4f,%.4f,%.4f\n", i, 360*r.Float64(), 180*r.Float64()-90, 20*r.Float64(), 20*r.Float64(), 0.01)
	}
	path := file(b, "stars.csv", text.String())
	k := Columns{RA: "ra", Dec: "dec", Mag: map[string]string{"r": "rmag"}, MagErr: map[string]string{"": "err"}, Colour: []string{"gmag", "rmag"}}
	for b.Loop() {
		if _, err := Read(path, k); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/n, "ns/star")
}
